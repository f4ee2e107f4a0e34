"""How well forecasts met what came: sums over rows, kept by patient, so that memory does not grow with the
cohort.

Levels of one patient are not independent, so every interval is of a ratio of sums over patients (the variance
between patients counts, after Liang & Zeger 1986); that of a share is a score interval (Wilson 1927) of so many
levels as would have this variance if they were independent. Medians are read from counts in cells 1 % wide."""

from __future__ import annotations

import heapq
import json
import math
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from itertools import groupby

import numpy as np
from numpy.typing import NDArray

from pkcalc.backtest.outlook import (
    FORECAST,
    LEFT_OUT,
    METHODS,
    NO_FORECAST,
    PATIENT,
    SET_ASIDE,
    WHOLE,
    Row,
)

Floats = NDArray[np.float64]

#: Fewer patients than this give no interval and no verdict.
FEWEST_PATIENTS = 20
WORST_SHOWN = 20
SAMPLE_SHOWN = 600
HINT_PATIENTS = 20_000
GROUPS_SHOWN = 40
RANK_CELLS = 40
EARLIER_SHOWN = 5

_CELLS = np.exp(np.arange(math.log(1e-3), math.log(1e3), 0.01))
#: Columns of a tally: rows, error, absolute error, its square, log ratio, within 20 and 30 %, inside 50 and 90 %, came
#: higher than forecast.
ROWS, ERROR, ABSOLUTE, SQUARE, LOG, IN20, IN30, IN50, IN90, HIGHER = range(10)
_COLUMNS = 10

#: Columns of a comparison: rows, absolute error of the second method less that of the first, second nearer.
DIFFERENCE, NEARER = 1, 2


@dataclass(frozen=True)
class Share:
    """A mean or share with its 95 % interval; low and high are None with too few patients."""

    value: float
    low: float | None
    high: float | None


class Sums:
    """Sums over rows, and between patients, of a few columns; ratios of them with intervals."""

    def __init__(self, columns: int) -> None:
        self.patients = 0
        self.total: Floats = np.zeros(columns)
        self.products: Floats = np.zeros((columns, columns))

    def add(self, one_patient: Floats) -> None:
        self.patients += 1
        self.total += one_patient
        self.products += np.outer(one_patient, one_patient)

    @property
    def rows(self) -> int:
        return round(float(self.total[ROWS]))

    def mean(self, column: int) -> Share:
        """Mean of a column over rows, with an interval that counts patients, not rows."""
        n, g = float(self.total[ROWS]), self.patients
        value = float(self.total[column]) / n
        if g < FEWEST_PATIENTS:
            return Share(value, None, None)
        half = self._student() * math.sqrt(self._variance(column, value))
        return Share(value, value - half, value + half)

    def share(self, column: int) -> Share:
        """As `mean`, of a column of noughts and ones: an interval within 0 and 1, also where all agree."""
        value = float(self.total[column]) / float(self.total[ROWS])
        if self.patients < FEWEST_PATIENTS:
            return Share(value, None, None)
        variance = self._variance(column, value)
        # all alike: nothing is seen of how a patient's levels go together, so patients are counted
        n = min(value * (1 - value) / variance, float(self.total[ROWS])) if variance > 0 else float(self.patients)
        z2 = self._student() ** 2 / n
        centre = (value + z2 / 2) / (1 + z2)
        half = math.sqrt(z2 * value * (1 - value) + z2**2 / 4) / (1 + z2)
        return Share(value, max(centre - half, 0.0), min(centre + half, 1.0))

    def _variance(self, column: int, value: float) -> float:
        q, g = self.products, self.patients
        between = float(q[column, column] - 2 * value * q[column, ROWS] + value**2 * q[ROWS, ROWS])
        return max(between, 0.0) * g / (g - 1) / float(self.total[ROWS]) ** 2

    def _student(self) -> float:
        from scipy.special import stdtrit

        return float(stdtrit(self.patients - 1, 0.975))


class Tally:
    """The accuracy of one method in one subgroup."""

    def __init__(self) -> None:
        self.sums = Sums(_COLUMNS)
        self.cells = np.zeros(len(_CELLS) + 1, dtype=np.int64)
        self.ranks = np.zeros(RANK_CELLS, dtype=np.int64)

    def add(self, rows: Sequence[Row]) -> None:
        """The rows of one patient."""
        self.sums.add(np.sum([_columns(r) for r in rows], axis=0))
        for r in rows:
            self.cells[np.searchsorted(_CELLS, abs(_error(r)))] += 1
            self.ranks[min(int((r.rank or 0.0) * RANK_CELLS), RANK_CELLS - 1)] += 1

    def median_absolute_error(self) -> float:
        """mg/L, to the 1 % of a cell."""
        at = int(np.searchsorted(np.cumsum(self.cells), 0.5 * self.cells.sum()))
        return float(_CELLS[min(max(at, 1), len(_CELLS) - 1)] * math.exp(-0.005))

    def covered(self, share: float) -> float:
        """Share of levels inside the central interval that should hold this share (a multiple of 5 %)."""
        cut = round((1 - share) / 2 * RANK_CELLS)
        return float(self.ranks[cut : RANK_CELLS - cut].sum() / self.ranks.sum())

    def as_dict(self) -> dict[str, object]:
        s = self.sums
        return {
            "levels": s.rows,
            "patients": s.patients,
            "mean_error_mg_per_L": _share(s.mean(ERROR)),
            "mean_absolute_error_mg_per_L": _share(s.mean(ABSOLUTE)),
            "median_absolute_error_mg_per_L": self.median_absolute_error(),
            "root_mean_square_error_mg_per_L": math.sqrt(s.mean(SQUARE).value),
            "mean_log_ratio": _share(s.mean(LOG)),
            "within_20_percent": _share(s.share(IN20)),
            "within_30_percent": _share(s.share(IN30)),
            "inside_50_percent_interval": _share(s.share(IN50)),
            "inside_90_percent_interval": _share(s.share(IN90)),
            "came_higher_than_forecast": _share(s.share(HIGHER)),
        }


def _share(found: Share) -> dict[str, float | None]:
    return {"value": found.value, "low": found.low, "high": found.high}


def _error(r: Row) -> float:
    assert r.forecast_mg_per_L is not None
    assert r.observed_mg_per_L is not None
    return r.forecast_mg_per_L - r.observed_mg_per_L


def _columns(r: Row) -> list[float]:
    error = _error(r)
    seen, said = r.observed_mg_per_L, r.forecast_mg_per_L
    assert seen is not None
    assert said is not None

    def inside(low: float | None, high: float | None) -> float:
        return float(low is not None and high is not None and low <= seen <= high)

    return [
        1.0,
        error,
        abs(error),
        error**2,
        math.log(said / seen),
        float(abs(error) <= 0.2 * seen),
        float(abs(error) <= 0.3 * seen),
        inside(r.low_50_mg_per_L, r.high_50_mg_per_L),
        inside(r.low_90_mg_per_L, r.high_90_mg_per_L),
        float(seen > said) + 0.5 * float(seen == said),
    ]


@dataclass(frozen=True)
class Bands:
    """Where the level bands part: the target range and the critical level, mg/L on the working basis."""

    low: float
    high: float
    critical: float

    def names(self) -> tuple[str, ...]:
        a, b, c = (f"{x:g}" for x in (self.low, self.high, self.critical))
        return (f"below {a} mg/L", f"{a} to {b} mg/L", f"{b} to {c} mg/L", f"{c} mg/L or more")

    def of(self, level_mg_per_L: float) -> str:
        edges = (self.low, self.high, self.critical)
        return self.names()[sum(level_mg_per_L >= e for e in edges)]


@dataclass
class Findings:
    """Everything the report is written from."""

    bands: Bands
    patients: int = 0
    forecast_patients: int = 0
    set_aside: Counter[str] = field(default_factory=Counter)
    left_out: Counter[str] = field(default_factory=Counter)
    no_forecast: Counter[tuple[str, str]] = field(default_factory=Counter)
    by_method: dict[str, Tally] = field(default_factory=dict)
    split: dict[str, dict[str, dict[str, Tally]]] = field(default_factory=dict)
    against: dict[tuple[str, str], Sums] = field(default_factory=dict)
    worst: list[tuple[float, int, int, Row]] = field(default_factory=list)
    sample: list[Row] = field(default_factory=list)
    placed: dict[str, list[Row]] = field(default_factory=dict)


OTHER = "other"


def gather(rows: Iterable[Row], bands: Bands, *, count: int) -> Findings:
    """One pass over the rows, by patient in the order of the folder. count: patients of the run."""
    found = Findings(bands)
    thin = max(1, -(-count // SAMPLE_SHOWN))
    thin_hint = max(1, -(-count // HINT_PATIENTS))
    for number, group in groupby(rows, key=lambda r: r.number):
        found.patients += 1
        own = list(group)
        forecasts = [r for r in own if r.kind == FORECAST]
        found.forecast_patients += bool(forecasts)
        for r in own:
            if r.kind == SET_ASIDE:
                found.set_aside[r.reason] += 1
            elif r.kind == LEFT_OUT:
                found.left_out[r.reason] += 1
            elif r.kind == NO_FORECAST:
                found.no_forecast[(r.method, r.reason)] += 1
            elif r.kind == PATIENT and number % thin_hint == 0:
                found.placed.setdefault(r.population, []).append(r)
        if forecasts:
            _add(found, forecasts, number % thin == 0)
    return found


def _add(found: Findings, forecasts: list[Row], shown: bool) -> None:
    groups = json.loads(forecasts[0].groups) if forecasts[0].groups else {}
    for method in METHODS:
        own = [r for r in forecasts if r.method == method]
        if not own:
            continue
        found.by_method.setdefault(method, Tally()).add(own)
        _split(found, "level that came", method, own, [found.bands.of(r.observed_mg_per_L or 0.0) for r in own])
        _split(found, "level forecast", method, own, [found.bands.of(r.forecast_mg_per_L or 0.0) for r in own])
        _split(found, "earlier levels", method, own, [_earlier(r.earlier) for r in own])
        for column, value in groups.items():
            _split(found, column, method, own, [value] * len(own))
    by_level: dict[int, dict[str, Row]] = {}
    for r in forecasts:
        by_level.setdefault(r.level, {})[r.method] = r
    for i, first in enumerate(METHODS):
        for second in METHODS[i + 1 :]:
            both = [m for m in by_level.values() if first in m and second in m]
            if both:
                columns = [_compare(m[first], m[second]) for m in both]
                found.against.setdefault((first, second), Sums(3)).add(np.sum(columns, axis=0))
    for r in forecasts:
        if r.method == WHOLE:
            far = abs(math.log((r.forecast_mg_per_L or 1.0) / (r.observed_mg_per_L or 1.0)))
            heapq.heappush(found.worst, (far, -r.number, -r.level, r))
            if len(found.worst) > WORST_SHOWN:
                heapq.heappop(found.worst)
            if shown:
                found.sample.append(r)


def _earlier(count: int) -> str:
    return f"{count}" if count < EARLIER_SHOWN else f"{EARLIER_SHOWN} or more"


def _compare(first: Row, second: Row) -> list[float]:
    a, b = abs(_error(first)), abs(_error(second))
    return [1.0, b - a, float(b < a) + 0.5 * float(b == a)]


def _split(found: Findings, by: str, method: str, rows: list[Row], values: list[str]) -> None:
    table = found.split.setdefault(by, {})
    for value in dict.fromkeys(values):
        name = value if value in table or len(table) < GROUPS_SHOWN else OTHER
        tally = table.setdefault(name, {}).setdefault(method, Tally())
        tally.add([r for r, v in zip(rows, values, strict=True) if v == value])
