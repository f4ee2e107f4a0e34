"""An independent second way for the engine: one draw, scipy's DOP853 at rtol 1e-12, piece by piece."""

from __future__ import annotations

import math

import numpy as np
from scipy.integrate import solve_ivp

from pkcalc.flow import Record


def reference_amounts(
    record: Record, times_day: list[float], vmax: float, kappa: float, start_mg: float = 0.0, k: float = 0.0
) -> np.ndarray:
    """Amounts [mg] at sorted times; k: rate of every first-order path of the record while it is open."""
    kas = sorted({d.absorption.ka_per_day for d in record.doses if d.absorption})
    pushes: list[tuple[float, int, float]] = []  # time, compartment, amount
    flows: list[tuple[float, float, int, float]] = []  # from, to, compartment, rate
    for dose in record.doses:
        form = dose.absorption
        begin = dose.time_day + (form.lag_day if form else 0.0)
        place = 1 + kas.index(form.ka_per_day) if form else 0
        spread = form.release_day if form else dose.duration_day
        if spread:
            flows.append((begin, begin + spread, place, dose.amount_mg / spread))
        else:
            pushes.append((begin, place, dose.amount_mg))
    marks = {record.start_day, *times_day, *(p[0] for p in pushes)}
    marks |= {edge for one in flows for edge in one[:2]}
    for path in record.first_order:
        marks |= {edge for edge in (path.start_day, path.end_day) if math.isfinite(edge)}
    moments = sorted(m for m in marks if record.start_day <= m <= times_day[-1])
    state = np.array([start_mg, *([0.0] * len(kas))])
    at = {}
    for now, after in zip(moments, [*moments[1:], None], strict=True):
        at[now] = state[0]
        for when, place, amount in pushes:
            if when == now:
                state[place] += amount
        if after is None:
            break
        rates = np.zeros(1 + len(kas))
        for begin, end, place, rate in flows:
            if begin <= now < end:
                rates[place] += rate
        open_k = k * sum(p.start_day <= now < p.end_day for p in record.first_order)

        def change(_: float, y: np.ndarray, rates: np.ndarray = rates, open_k: float = open_k) -> np.ndarray:
            moved = np.array(kas) * y[1:]
            inside = rates[0] + moved.sum() - vmax * y[0] / (kappa + y[0]) - open_k * y[0]
            return np.concatenate([[inside], rates[1:] - moved])

        done = solve_ivp(change, (now, after), state, method="DOP853", rtol=1e-12, atol=1e-12)
        state = done.y[:, -1]
    return np.array([at[t] for t in times_day])
