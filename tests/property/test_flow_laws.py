"""What must hold of the engine for any record and patient, and DOP853 at rtol 1e-12 as its second way."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pkcalc import flow, formulas, periodic, stepping
from pkcalc.flow import Absorption, Before, Dose, FirstOrder, Record, Repeated
from tests.property.reference import reference_amounts

#: Absorption rates seen in the drug files' range, 1/day: slow release to prompt intramuscular.
KAS = (4.0, 9.8, 14.0, 36.0, 48.0)


def random_draws(rng: np.random.Generator, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Vmax [mg/day] and kappa [mg] as the default adult population spreads them."""
    vmax = 455 * np.exp(0.25 * rng.standard_normal(n))
    kappa = 5 * np.exp(0.5 * rng.standard_normal(n)) * 49 * np.exp(0.2 * rng.standard_normal(n))
    return vmax, kappa


def random_record(rng: np.random.Generator, days: int, *, oral: bool = True) -> Record:
    """Doses by several routes and forms, some missed, some extra, a change of form, perhaps a session."""
    doses = []
    form = None
    for day in range(days):
        if form is None or rng.random() < 0.2:
            form = Absorption(
                float(rng.choice(KAS)),
                lag_day=float(rng.choice([0.0, 0.0, 0.5 / 24])),
                release_day=float(rng.choice([0.0, 0.0, 1.1 / 24, 6 / 24])),
            )
        for hour in (6, 14, 22)[: int(rng.integers(1, 4))]:
            if oral and rng.random() < 0.85:
                doses.append(Dose(day + (hour + rng.uniform(-1, 1)) / 24, 100.0, absorption=form))
        if rng.random() < 0.15 or not oral:
            doses.append(Dose(day + rng.uniform(0, 1), float(rng.uniform(50, 800))))
        if rng.random() < 0.15 or not oral:
            doses.append(Dose(day + rng.uniform(0, 1), float(rng.uniform(50, 800)), duration_day=rng.uniform(0.02, 2)))
    session = rng.uniform(0, days - 0.3)
    paths = (FirstOrder(rate_per_day=4.0, start_day=session, end_day=session + 0.2),) if rng.random() < 0.4 else ()
    return Record(tuple(doses), first_order=paths)


def errors(rng: np.random.Generator, records: int, accuracy: flow.Accuracy, *, oral: bool = True) -> np.ndarray:
    found = []
    for _ in range(records):
        days = int(rng.integers(1, 8))
        record = random_record(rng, days, oral=oral)
        times = np.sort(rng.uniform(0.2, days, 6))
        vmax, kappa = random_draws(rng, 256)
        ours = flow.amounts(record, times, vmax, kappa, accuracy=accuracy)
        # the fastest draw, whose error is the largest, and one other
        for one in (int(np.argmax(vmax / kappa)), 0):
            theirs = reference_amounts(record, times.tolist(), vmax[one], kappa[one], k=4.0)
            seen = theirs > 1e-6
            found.extend(np.abs(ours[one][seen] / theirs[seen] - 1))
    return np.array(found)


def test_everyday_accuracy_against_dop853() -> None:
    found = errors(np.random.default_rng(1), 15, "everyday")
    assert len(found) > 100
    assert found.max() <= 3e-3


def test_everyday_accuracy_of_all_draws() -> None:
    """99 % of draws within 1.1e-3, against the finest steps (within 2e-7 of DOP853 by the next test)."""
    rng = np.random.default_rng(17)
    found = []
    for _ in range(8):
        record = random_record(rng, 10)
        times = np.sort(rng.uniform(0.2, 10, 6))
        vmax, kappa = random_draws(rng, 1024)
        everyday, finest = (flow.amounts(record, times, vmax, kappa, accuracy=a) for a in ("everyday", "finest"))
        found.append(np.abs(everyday / finest - 1))
    assert np.quantile(found, 0.99) <= 1.1e-3
    assert np.max(found) <= 3e-3


@pytest.mark.parametrize(("accuracy", "allowed"), [("fine", 4e-5), ("finest", 2e-7)])
def test_finer_settings_against_dop853(accuracy: flow.Accuracy, allowed: float) -> None:
    found = errors(np.random.default_rng(2), 4, accuracy)
    assert found.max() <= allowed


def test_records_without_absorption_are_exact() -> None:
    found = errors(np.random.default_rng(3), 6, "everyday", oral=False)
    # what is left is the solver's own error
    assert found.max() <= 1e-9


@pytest.mark.slow
@pytest.mark.parametrize(
    ("accuracy", "records", "allowed"), [("everyday", 1500, 3e-3), ("fine", 150, 4e-5), ("finest", 50, 2e-7)]
)
def test_accuracy_on_many_records(accuracy: flow.Accuracy, records: int, allowed: float) -> None:
    found = errors(np.random.default_rng(4), records, accuracy)
    assert found.max() <= allowed


def test_every_milligram_is_accounted_for() -> None:
    """With hardly any elimination the amount is what has reached the blood, whatever the steps."""
    rng = np.random.default_rng(6)
    for _ in range(20):
        record = replace(random_record(rng, 6), first_order=())
        times = np.sort(rng.uniform(0, 12, 5))
        ours = flow.amounts(record, times, 1e-12, 1e3)[0]
        for time, amount in zip(times, ours, strict=True):
            arrived = sum(arrived_by(dose, time) for dose in record.doses)
            assert math.isclose(amount, arrived, rel_tol=1e-12, abs_tol=1e-9)


def arrived_by(dose: Dose, time: float) -> float:
    """Amount of one dose that has reached the blood by a time, in closed form."""
    form = dose.absorption
    s = time - dose.time_day - (form.lag_day if form else 0.0)
    if s <= 0:
        return 0.0
    if form is None:
        return dose.amount_mg * (1.0 if dose.duration_day == 0 else min(s / dose.duration_day, 1.0))
    ka, release = form.ka_per_day, form.release_day
    if release == 0:
        return -dose.amount_mg * math.expm1(-ka * s)
    shown = min(s, release)
    in_gut = -math.expm1(-ka * shown) / ka * math.exp(-ka * (s - shown))
    return dose.amount_mg / release * (shown - in_gut)


@settings(max_examples=300)
@given(
    st.lists(st.floats(0, 1e4), min_size=2, max_size=2),
    st.floats(1e-3, 1e4),
    st.floats(1e-3, 1.0),
    st.floats(0, 1e3),
    st.floats(0, 1),
    st.floats(0, 0.5),
)
def test_one_step_is_positive_ordered_and_brings_courses_no_further_apart(
    starts: list[float], kappa: float, speed: float, full: float, part: float, linear: float
) -> None:
    """For h (Vmax/kappa + k) <= 1, as proved: also every stage lies between 0 and what is there to be removed."""
    h, k = 1.0, linear * speed
    vmax = kappa * (speed - k)
    low, high = sorted(starts)
    block = stepping.Block(np.full(2, vmax), np.full(2, kappa), np.array([low, high]))
    block.k = k
    step = stepping.Step(h, 0.0, part * full, full, None, (), ())
    block.take(step)
    end = block.w * vmax
    room = 1e-12 * (high + full + kappa)
    assert np.all(end >= 0)
    assert end[0] <= end[1] + room
    assert end[1] - end[0] <= high - low + room
    for stage in (block.x2, block.x3, block.x4):
        assert np.all(stage * vmax >= -room)
        assert np.all(stage * vmax <= np.array([low, high]) + full + room)


def test_more_intake_less_vmax_more_kappa_never_less_drug() -> None:
    rng = np.random.default_rng(7)
    for _ in range(10):
        record = random_record(rng, 5)
        times = np.sort(rng.uniform(0.1, 6, 6))
        vmax, kappa = random_draws(rng, 64)
        base = flow.amounts(record, times, vmax, kappa, start_mg=100.0, typical_per_day=20.0)
        more = replace(record, doses=tuple(replace(d, amount_mg=1.1 * d.amount_mg) for d in record.doses))
        for other in (
            flow.amounts(more, times, vmax, kappa, start_mg=100.0, typical_per_day=20.0),
            flow.amounts(record, times, vmax, kappa, start_mg=110.0, typical_per_day=20.0),
            flow.amounts(record, times, vmax / 1.1, kappa, start_mg=100.0, typical_per_day=20.0),
            flow.amounts(record, times, vmax, kappa * 1.1, start_mg=100.0, typical_per_day=20.0),
        ):
            assert np.all(base > 0)
            assert np.all(other >= base * (1 - 1e-12))


def test_scaling_of_amounts_and_of_time() -> None:
    rng = np.random.default_rng(8)
    record = random_record(rng, 5)
    times = np.array([0.7, 2.2, 5.0])
    vmax, kappa = random_draws(rng, 32)
    base = flow.amounts(record, times, vmax, kappa)
    larger = replace(record, doses=tuple(replace(d, amount_mg=8 * d.amount_mg) for d in record.doses))
    assert np.allclose(flow.amounts(larger, times, 8 * vmax, 8 * kappa), 8 * base, rtol=1e-12)

    def slow(dose: Dose) -> Dose:
        form = dose.absorption
        return Dose(
            2 * dose.time_day,
            dose.amount_mg,
            2 * dose.duration_day,
            form and Absorption(form.ka_per_day / 2, 2 * form.lag_day, 2 * form.release_day),
        )

    slower = Record(
        tuple(slow(d) for d in record.doses),
        first_order=tuple(
            FirstOrder(rate_per_day=p.rate_per_day / 2, start_day=2 * p.start_day, end_day=2 * p.end_day)
            for p in record.first_order
        ),
    )
    assert np.allclose(flow.amounts(slower, 2 * times, vmax / 2, kappa), base, rtol=1e-9)


def test_two_records_in_a_row_are_one() -> None:
    """Stopping at a time and going on from the amount then, with what is still in the gut."""
    rng = np.random.default_rng(9)
    for _ in range(10):
        record = random_record(rng, 5)
        vmax, kappa = random_draws(rng, 16)
        cut, end = 2.0 + rng.uniform(0, 1), 5.5
        whole = flow.amounts(record, [cut, end], vmax, kappa, accuracy="finest")
        rest = Record(record.doses, start_day=cut, start_mg=0.0, first_order=record.first_order)
        later = flow.amounts(rest, [end], vmax, kappa, accuracy="finest", start_mg=whole[:, 0])
        # the steps differ (a new start is a new beginning of the step rule), the answer does not
        assert np.allclose(later[:, 0], whole[:, 1], rtol=4e-7)


def test_linear_limit_is_one_compartment_with_first_order_absorption() -> None:
    ka, k, dose = 10.0, 0.8, 300.0
    record = Record((Dose(0.0, dose, absorption=Absorption(ka)),))
    times = np.array([0.01, 0.1, 0.3, 1.0, 3.0, 8.0])
    expected = dose * ka / (ka - k) * (np.exp(-k * times) - np.exp(-ka * times))
    ours = flow.amounts(record, times, k * 1e12, 1e12)[0]
    assert np.allclose(ours, expected, rtol=1e-3)
    finest = flow.amounts(record, times, k * 1e12, 1e12, accuracy="finest")[0]
    assert np.allclose(finest, expected, rtol=1e-8)


def random_regimen(rng: np.random.Generator, route: str) -> Repeated:
    cycle = float(rng.choice([0.5, 1.0, 1.0, 2.0]))
    doses = []
    for _ in range(int(rng.integers(1, 4))):
        at, amount = float(rng.uniform(0, cycle * 0.999)), float(rng.choice([50, 100, 200]))
        form = Absorption(
            float(rng.choice(KAS)),
            lag_day=float(rng.choice([0.0, 0.02])),
            release_day=float(rng.choice([0.0, 0.05, 0.3])),
        )
        doses.append(
            {
                "oral": Dose(at, amount, absorption=form),
                "push": Dose(at, amount),
                "infusion": Dose(at, amount, duration_day=float(rng.uniform(0.02, 1.5 * cycle))),
            }[route]
        )
    return Repeated(cycle, tuple(doses))


@pytest.mark.parametrize("route", ["oral", "push", "infusion"])
def test_plateau_lies_in_its_brackets(route: str) -> None:
    rng = np.random.default_rng(10)
    for _ in range(12):
        regimen = random_regimen(rng, route)
        rate, per_cycle = regimen.rate_mg_per_day, regimen.rate_mg_per_day * regimen.cycle_day
        share = np.concatenate([rng.uniform(0.1, 0.98, 30), [0.99, 0.999, 0.9999, 1 - 1e-6, 1.0, 1.2]])
        vmax = rate / share
        kappa = np.exp(rng.uniform(np.log(vmax / 40), np.log(vmax * 5)))
        state = flow.periodic(regimen, vmax, kappa)
        exists = share < 1
        assert np.array_equal(state.exists, exists)
        for none in (state.start_mg, state.trough_mg, state.peak_mg, state.average_mg):
            assert np.all(none[~exists] == np.inf)
        low = periodic.lower_bound(per_cycle, regimen.cycle_day, vmax[exists], kappa[exists])
        steady = np.asarray(
            formulas.steady_state_level(
                dose_rate_mg_per_day=rate, vmax_mg_per_day=vmax[exists], km_mg_per_L=kappa[exists]
            )
        )
        room = 3e-3 * steady
        trough, peak, average = (x[exists] for x in (state.trough_mg, state.peak_mg, state.average_mg))
        assert np.all(trough >= low - room)
        assert np.all(peak <= low + per_cycle + room)
        assert np.all(trough <= steady + room)
        assert np.all(steady <= peak + room)
        assert np.all(average >= steady - room)
        assert np.all((trough <= average + room) & (average <= peak + room))
        assert np.all((state.trough_time_day >= 0) & (state.trough_time_day <= regimen.cycle_day))


def test_newton_needs_at_most_seven_steps() -> None:
    rng = np.random.default_rng(12)
    worst = 0
    for route in ("oral", "push", "infusion"):
        for _ in range(10):
            regimen = random_regimen(rng, route)
            vmax = regimen.rate_mg_per_day / rng.uniform(0.05, 0.99, 64)
            kappa = np.exp(rng.uniform(np.log(vmax / 40), np.log(vmax * 5)))
            worst = max(worst, flow.periodic(regimen, vmax, kappa).newton_steps)
    assert 3 <= worst <= 7


def test_plateau_of_pushes_is_the_closed_form() -> None:
    vmax = np.array([101.0, 110.0, 150.0, 300.0, 1000.0])
    for kappa in (250.0, 25.0):
        state = flow.periodic(Repeated(1.0, (Dose(0.0, 100.0),)), vmax, kappa)
        trough = 100.0 / np.expm1((vmax - 100.0) / kappa)
        assert np.allclose(state.trough_mg, trough, rtol=1e-9)
        assert np.allclose(state.peak_mg, trough + 100.0, rtol=1e-9)


def test_plateau_is_where_400_simulated_days_end() -> None:
    rng = np.random.default_rng(13)
    for route in ("oral", "infusion"):
        for _ in range(1):
            regimen = random_regimen(rng, route)
            vmax = regimen.rate_mg_per_day / rng.uniform(0.2, 0.8, 48)
            kappa = np.exp(rng.uniform(np.log(vmax / 10), np.log(vmax)))
            cycles = round(400 / regimen.cycle_day)
            end = cycles * regimen.cycle_day
            # the last cycle from its start: plateau's start, and the plateau repeats
            simulated = flow.amounts(Record(regimen.cycles(0, cycles, 0.0)), [end], vmax, kappa)[:, 0]
            state = flow.periodic(regimen, vmax, kappa)
            assert np.allclose(simulated, state.start_mg, rtol=2e-3)
            again = flow.amounts(
                Record(regimen.cycles(-regimen.cycles_still_absorbed(), 1, 0.0), start_mg=0.0),
                [regimen.cycle_day],
                vmax,
                kappa,
                start_mg=state.start_mg,
            )[:, 0]
            assert np.allclose(again, state.start_mg, rtol=3e-3)


def test_plateau_near_vmax_joins_the_limit_formula_smoothly() -> None:
    regimen = Repeated(1.0, (Dose(0.0, 200.0, absorption=Absorption(10.0)), Dose(0.4, 100.0)))
    kappa = 240.0
    # (Vmax tau - D)/kappa just above and below the change of method
    vmax = 300.0 + kappa * periodic.NEAR_VMAX * np.array([0.999999, 1.000001])
    state = flow.periodic(regimen, vmax, kappa, accuracy="finest")
    for values in (state.start_mg, state.trough_mg, state.peak_mg, state.average_mg):
        assert math.isclose(values[0], values[1], rel_tol=3e-6)
    # and single doses agree with the limit of the closed form: Xss - D [1/(1 - e^(-ka tau)) - 1/(ka tau) - 1/2]
    one = Repeated(1.0, (Dose(0.0, 300.0, absorption=Absorption(10.0)),))
    close = flow.periodic(one, 300.0 * (1 + 1e-5), kappa, accuracy="fine")
    steady = 300.0 * kappa / (300.0 * 1e-5)
    below = 300.0 * (1 / -math.expm1(-10.0) - 1 / 10.0 - 0.5)
    assert steady - close.start_mg[0] == pytest.approx(below, rel=1e-4)


def test_a_linear_path_gives_a_plateau_at_any_rate() -> None:
    regimen = Repeated(1.0, (Dose(0.0, 600.0, absorption=Absorption(10.0)),))
    state = flow.periodic(regimen, [400.0, 600.0, 900.0], 240.0, first_order_per_day=0.2)
    assert np.all(state.exists)
    simulated = flow.amounts(
        Record(regimen.cycles(0, 200, 0.0), first_order=(FirstOrder(rate_per_day=0.2),)),
        [200.0],
        [400.0, 600.0, 900.0],
        240.0,
    )[:, 0]
    assert np.allclose(simulated, state.start_mg, rtol=3e-3)


@pytest.mark.parametrize("before", [None, 20.0])
def test_sensitivity_is_the_derivative(before: float | None) -> None:
    """Against a central difference of the whole engine; windows may overlap, and may reach before the start."""
    rng = np.random.default_rng(14)
    regimen = Repeated(1.0, (Dose(0.1, 150.0, absorption=Absorption(12.0)), Dose(0.6, 150.0)))
    earlier = None if before is None else Before(regimen, before)
    record = replace(random_record(rng, 8), before=earlier, first_order=())
    times = [0.0, 1.3, 4.0, 8.5] if before else [1.3, 4.0, 8.5]
    vmax, kappa = random_draws(rng, 48)
    windows = [(-30.0, 0.0), (0.0, 3.0), (2.0, 9.0), (20.0, 30.0)]
    found = flow.sensitivity(record, times, windows, vmax, kappa, accuracy="fine")
    assert found.shape == (48, len(times), 4)
    for w, (a, b) in enumerate(windows):
        sides = []
        for scale in (1.0005, 0.9995):
            changed = replace(
                record,
                doses=tuple(
                    replace(d, amount_mg=d.amount_mg * (scale if a <= d.time_day < b else 1.0)) for d in record.doses
                ),
            )
            if earlier is not None and a < 0:
                scaled = tuple(replace(d, amount_mg=d.amount_mg * scale) for d in regimen.doses)
                changed = replace(changed, before=Before(Repeated(1.0, scaled), before or 0.0))
            sides.append(np.log(flow.amounts(changed, times, vmax, kappa, accuracy="finest")))
        difference = (sides[0] - sides[1]) / 0.001
        # where the start changes rule (plateau or build-up) between the two sides, a difference means nothing
        usable = np.abs(difference) < 50
        assert usable.mean() > 0.95
        assert np.all(np.abs(found[..., w] - difference)[usable] <= 1e-3 * np.abs(difference[usable]) + 2e-4)


def test_sensitivity_soon_after_a_dose_at_everyday_steps() -> None:
    """Where one step still matters: within hours of one dose, fast elimination."""
    times = [0.03, 0.08, 0.2, 0.5]
    sides = [
        np.log(flow.amounts(Record((Dose(0.0, a, absorption=Absorption(8.0)),)), times, 600.0, 40.0, accuracy="finest"))
        for a in (300.3, 299.7)
    ]
    record = Record((Dose(0.0, 300.0, absorption=Absorption(8.0)),))
    found = flow.sensitivity(record, times, [(0.0, 1.0)], 600.0, 40.0)[..., 0]
    assert np.allclose(found, (sides[0] - sides[1]) / 0.002, rtol=2e-3)


def test_stiff_draws_are_bounded_in_work_and_right() -> None:
    """Km next to nothing: the answer follows the closed form's limit, and mass is kept."""
    record = Record(tuple(Dose(i / 3, 100.0, absorption=Absorption(11.0)) for i in range(3)))
    times = [0.2, 0.5, 1.0]
    for vmax, kappa in ((250.0, 0.1), (250.0, 1e-6), (400.0, 1e-3)):
        ours = flow.amounts(record, times, vmax, kappa)[0]
        finer = flow.amounts(record, times, vmax, kappa, accuracy="fine")[0]
        assert np.all(ours > 0)
        assert np.allclose(ours, finer, rtol=3e-3, atol=1e-3)
    # elimination at the full rate throughout: amount = arrived - Vmax t, exactly
    arrived = sum(arrived_by(d, 1.0) for d in record.doses)
    assert math.isclose(flow.amounts(record, [1.0], 250.0, 1e-9)[0, 0], arrived - 250.0, rel_tol=1e-6)
