"""Laws of the plan: more drug is never less level, nothing is lost in merging, everything offered can be dispensed."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from pkcalc import formulas
from pkcalc.dosing import Intake, Regimen
from pkcalc.forecast import forecast_rates, levels_on_days, two_lines
from pkcalc.plan import loading
from pkcalc.plan.candidates import as_regimen, candidates, danger
from pkcalc.plan.courses import swing
from pkcalc.plan.nextlevel import expected_spread, spread_now
from pkcalc.plan.pausing import time_to_fall
from pkcalc.plan.shelf import dispensable, dispense_words, made_from
from tests.unit.planning import GOAL, SCALE, estimate, exact, profile, setting
from tests.unit.shelf_rules import active_per_day, broken_rules, every_regimen

P = profile()
SOLID = ("extended-capsule-30", "extended-capsule-100", "extended-capsule-300", "prompt-capsule-50", "chewable-50")
ALL = tuple(P.products)

rates = st.lists(st.floats(10.0, 700.0), min_size=2, max_size=12).map(sorted)
starts = st.floats(0.0, 60.0)


@given(rates, starts, st.integers(0, 5))
def test_more_drug_never_lowers_a_level_or_a_danger(doses: list[float], start: float, seed: int) -> None:
    draws = estimate(n=256, seed=seed)
    found = forecast_rates(draws, doses, GOAL, SCALE, present_mg_per_L=start)
    for less, more in pairwise(found):
        for part in ("median", "low", "high"):
            assert getattr(more.steady, part) >= getattr(less.steady, part)
        assert more.below <= less.below
        assert more.above >= less.above
        assert more.above_critical >= less.above_critical
        assert more.no_steady_state >= less.no_steady_state
    chances = danger(setting(draws, start_mg_per_L=start), doses)
    assert (np.diff(chances) >= -1e-12).all()
    days = levels_on_days(draws, doses, (1.0, 7.0, 28.0), start)
    for less, more in pairwise(days):
        assert all(b.median >= a.median * (1 - 1e-12) for a, b in zip(less, more, strict=True))


@given(rates, starts, st.floats(0.0, 0.5), st.booleans())
def test_the_safety_line_is_never_the_kinder_one(
    doses: list[float], start: float, missed: float, counted: bool
) -> None:
    lines = two_lines(estimate(n=256), missed, counted=counted)
    central = forecast_rates(lines.central, doses, GOAL, SCALE, present_mg_per_L=start)
    taken = forecast_rates(lines.taken, doses, GOAL, SCALE, present_mg_per_L=start)
    for c, t in zip(central, taken, strict=True):
        assert t.steady.median >= c.steady.median
        assert t.above_critical >= c.above_critical
        assert t.below <= c.below


@given(rates)
def test_chances_are_chances(doses: list[float]) -> None:
    for f in forecast_rates(estimate(n=256), doses, GOAL, SCALE):
        assert f.below + f.within + f.above == pytest.approx(1.0, abs=1e-9)
        assert 0 <= f.no_steady_state <= f.above_critical <= f.above <= 1
        assert min(f.below, f.within) >= 0
        assert f.steady.low <= f.steady.median <= f.steady.high
        assert f.steady.low > 0


@settings(max_examples=12)
@given(st.sets(st.sampled_from(SOLID), min_size=1, max_size=2), st.floats(60.0, 300.0))
def test_merging_never_loses_an_active_amount(shelf: set[str], largest: float) -> None:
    some = tuple(sorted(shelf))
    listed = {round(m.active_mg_per_day, 5) for m in dispensable(P, some, largest_active_mg_per_day=largest)}
    for doses in every_regimen(some, round(largest, 6), P):
        assert round(active_per_day(doses, 1, P), 5) in listed


@settings(max_examples=25)
@given(st.sets(st.sampled_from(ALL), min_size=1, max_size=6), st.floats(50.0, 600.0), st.booleans())
def test_everything_that_is_listed_can_be_dispensed(shelf: set[str], largest: float, alternate: bool) -> None:
    some = tuple(sorted(shelf))
    made = dispensable(P, some, largest_active_mg_per_day=largest, alternate_days=alternate)
    amounts = [m.active_mg_per_day for m in made]
    assert amounts == sorted(amounts)
    assert all(b - a > 1e-7 for a, b in pairwise(amounts))
    for m in made[:: max(1, len(made) // 40)]:
        doses = [{p.product: p.units for p in dose} for dose in m.doses]
        assert broken_rules(doses, m.days, some, P) == [], dispense_words(m, P)
        assert m.active_mg_per_day <= largest + 1e-6
        assert as_regimen(m, P).active_mg_per_day(P) == pytest.approx(m.active_mg_per_day, rel=1e-9)


@settings(max_examples=10)
@given(st.integers(0, 3), st.floats(4.0, 28.0))
def test_everything_offered_is_within_every_limit(seed: int, start: float) -> None:
    s = setting(estimate(seed=seed), start_mg_per_L=start, largest_mg_per_day=400.0)
    made = dispensable(P, SOLID[:3], largest_active_mg_per_day=552.0)
    for c in candidates(made, (), s):
        assert c.offered == (not c.why_not)
        if c.offered:
            assert c.danger <= s.site.stop_chance
            assert c.rate_mg_per_day <= 400.0 * (1 + 1e-9)
        else:
            assert c.danger > s.site.stop_chance or c.rate_mg_per_day > 400.0


@given(st.integers(1, 160), st.sampled_from(["extended-capsule", "chewable-tablet", "suspension"]))
def test_what_is_made_from_the_shelf_is_the_dose_asked_for(tens: int, form: str) -> None:
    shelf = P.shelves["united-states"].products
    parts = made_from(10.0 * tens, form, shelf, P)
    if parts is not None:
        assert sum(p.units * P.products[p.product].mg_per_unit for p in parts) == pytest.approx(10.0 * tens)
        assert len({p.product for p in parts}) == len(parts) <= 2
        assert all(P.products[p.product].form == form for p in parts)


@settings(max_examples=15)
@given(
    st.lists(st.tuples(st.floats(0.0, 23.9), st.floats(20.0, 150.0)), min_size=1, max_size=3, unique_by=lambda x: x[0]),
    st.sampled_from(["extended-capsule", "suspension", "injection"]),
)
def test_the_steady_level_lies_between_trough_and_peak(doses: list[tuple[float, float]], form: str) -> None:
    regimen = Regimen(tuple(Intake(form, h, mg) for h, mg in sorted(doses)))
    rate = regimen.active_mg_per_day(P)
    one = exact(vmax=rate * 1.6, km=5.0)
    ((trough, _, peak),) = swing(one, [regimen], P)
    steady = 5.0 * rate / (0.6 * rate)
    assert trough.median <= steady * (1 + 1e-6)
    assert peak.median >= steady * (1 - 1e-6)
    per_cycle = sum(mg for _, mg in doses) * P.forms[form].active_fraction
    assert peak.median - trough.median <= per_cycle / 49.0 * (1 + 1e-6)


@settings(max_examples=20)
@given(
    st.floats(200.0, 800.0), st.floats(1.0, 12.0), st.floats(15.0, 80.0), st.floats(21.0, 60.0), st.floats(5.0, 20.0)
)
def test_pause_times_by_solve_ivp(vmax: float, km: float, volume: float, start: float, end: float) -> None:
    """The closed form against an independent solver, from the level back: dt/dC is integrated."""
    days = time_to_fall(exact(vmax, km, volume), np.full(8, start), end)

    def slope(c: float, _t: float) -> float:
        return -volume * (km + c) / (vmax * c)

    solved = solve_ivp(slope, (start, end), [0.0], method="DOP853", rtol=1e-11, atol=1e-13)
    assert days[0] == pytest.approx(float(solved.y[0, -1]), rel=1e-8)


@given(st.floats(20.0, 2500.0), st.sampled_from(["injection-50", "fosphenytoin-50"]), st.floats(100.0, 2000.0))
def test_vials_hold_what_is_ordered_and_stay_below_the_ceiling(amount: float, product: str, most: float) -> None:
    p = P.products[product]
    ordered = loading.round_to_vials(min(amount, most), p, most)
    assert 0 < ordered <= most
    steps = ordered / (p.smallest_step * p.mg_per_unit)
    assert steps == pytest.approx(round(steps))
    assert abs(ordered - min(amount, most)) <= max(0.05 * min(amount, most), p.smallest_step * p.mg_per_unit)
    words = loading.vial_words(ordered, p).replace(" and ", " ").split()
    counts = [int(n) for n, w in pairwise(words) if w.startswith("vial")]
    sizes = [float(n) for n, w in pairwise(words) if w == "mL"]
    assert sum(c * s for c, s in zip(counts, sizes, strict=True)) * p.mg_per_unit >= ordered - 1e-6


@given(st.floats(1.0, 2000.0), st.sampled_from(["injection", "fosphenytoin-injection"]), st.floats(5.0, 150.0))
def test_an_infusion_never_breaks_its_cap(amount: float, form: str, weight: float) -> None:
    caps = [c for c in P.loading.rate_caps if c.form == form]  # type: ignore[union-attr]
    for some in ([c] for c in caps):
        minutes = loading.infusion_minutes(amount, some, weight)
        assert minutes == int(minutes) >= 1
        assert amount / minutes <= loading.rate_mg_per_min(some, weight) * (1 + 1e-9)
    together = loading.infusion_minutes(amount, caps, weight)
    assert together == max(loading.infusion_minutes(amount, [c], weight) for c in caps)


@given(st.floats(1.0, 3000.0), st.sampled_from([25.0, 50.0, 100.0, 200.0]))
def test_parts_of_an_oral_load_keep_every_rule(amount: float, unit: float) -> None:
    oral = P.loading.oral  # type: ignore[union-attr]
    assert oral is not None
    parts = loading.split(
        amount, unit, total_mg=oral.total_mg, at_once_mg=oral.largest_part_mg, apart_h=oral.hours_apart
    )
    total = sum(mg for _, mg in parts)
    assert total <= oral.total_mg
    assert all(0 < mg <= oral.largest_part_mg for _, mg in parts)
    assert [mg for _, mg in parts] == sorted((mg for _, mg in parts), reverse=True)
    if amount <= oral.total_mg:
        assert abs(total - amount) <= unit / 2 + 1e-9


@settings(max_examples=20)
@given(st.integers(0, 10_000), st.floats(0.05, 1.0))
def test_a_draw_never_widens_the_forecast(seed: int, noise: float) -> None:
    random = np.random.default_rng(seed)
    target = random.standard_normal(300)
    level = 0.3 * random.standard_normal(300) + random.uniform(-1, 1) * target
    weights = random.random(300)
    weights /= weights.sum()
    after = expected_spread(target, level, weights, noise)
    assert 0 <= after <= spread_now(target, weights) * (1 + 1e-9)
    assert after <= expected_spread(target, level, weights, 2 * noise) * (1 + 1e-6)


def nested(target: np.ndarray, log_level: np.ndarray, noise: float, sets: int, seed: int) -> float:
    """Brute force: draw a patient, draw its level, weigh all draws by it, take the spread left; averaged (variance)."""
    random = np.random.default_rng(seed)
    total = 0.0
    for who in random.integers(0, len(target), sets):
        seen = log_level[who] + noise * random.standard_normal()
        w = np.exp(-0.5 * ((log_level - seen) / noise) ** 2)
        w /= w.sum()
        total += spread_now(target, w) ** 2
    return float(np.sqrt(total / sets))


@pytest.mark.parametrize(("rate", "days", "start", "noise"), [(340.0, 6.0, 8.0, 0.2), (300.0, 12.0, 3.0, 0.15)])
def test_the_expected_spread_by_nested_simulation(rate: float, days: float, start: float, noise: float) -> None:
    """Two cases by brute force: simulate the draw, learn from it, average."""
    draws = estimate(n=4096)
    assert draws.volume_L is not None
    level = formulas.level_after(
        time_day=days,
        start_mg_per_L=start,
        dose_rate_mg_per_day=rate,
        vmax_mg_per_day=draws.vmax_mg_per_day,
        km_mg_per_L=draws.km_mg_per_L,
        volume_L=draws.volume_L,
    )
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rate, vmax_mg_per_day=draws.vmax_mg_per_day, km_mg_per_L=draws.km_mg_per_L
    )
    target = np.log(np.minimum(steady, 120.0))
    found = expected_spread(target, np.log(level), draws.weights, noise)
    assert found == pytest.approx(nested(target, np.log(level), noise, 4000, 5), rel=0.03)


@pytest.mark.slow
@pytest.mark.parametrize(("mg", "day"), [(300.0, 6.0), (400.0, 4.0)])
def test_the_expected_spread_by_refitting(mg: float, day: float) -> None:
    """Simulate patients and their draw, refit each from the population, average what is left: no draw of ours is used."""
    from pkcalc import flow
    from pkcalc.dosing import flow_repeated
    from pkcalc.estimate import posterior
    from pkcalc.estimate.error_model import LevelData, RecordSpread
    from pkcalc.plan.nextlevel import log_steady
    from pkcalc.record import Record

    prior = P.default_population(40.0).at(70.0, 40.0)
    regimen = Regimen((Intake("extended-capsule", 21.0, mg),))
    rate = regimen.active_mg_per_day(P)
    record = Record(doses=flow_repeated(regimen, P).cycles(0, 10, 0.0))
    draws = posterior.prior_only(prior, n=2048)
    assert draws.volume_L is not None
    spread = RecordSpread(doses_differing=0.0, wrong_level_chance=0.0)
    level = flow.levels(record, (day,), draws.vmax_mg_per_day, draws.km_mg_per_L, draws.volume_L)[:, 0]
    noise = 0.2
    found = expected_spread(log_steady(draws, rate, GOAL), np.log(level), draws.weights, noise)
    random = np.random.default_rng(11)
    left = []
    for who in random.choice(2048, 120, replace=False):
        seen = float(level[who] * np.exp(noise * random.standard_normal()))
        data = LevelData(time_day=day, level_mg_per_L=seen, assay_cv=np.sqrt(np.expm1(noise**2)), day_cv=0.0)
        refit = posterior.from_record(record, (data,), prior, spread)
        left.append(spread_now(log_steady(refit, rate, GOAL), refit.weights) ** 2)
    brute, error = float(np.mean(left)), float(np.std(left) / np.sqrt(len(left)))
    assert abs(found**2 - brute) <= 3 * error + 0.05 * brute


def test_a_limit_of_no_shelf_is_no_regimen() -> None:
    assert dispensable(P, (), largest_active_mg_per_day=500.0) == ()
    assert candidates((), (), replace(setting())) == ()
