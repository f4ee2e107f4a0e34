"""Each level on the working basis: binding, timing, duplicates, spread."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import pytest

from pkcalc.consult import run_consult
from pkcalc.drugs.profile import load_profile
from pkcalc.levels import Observation, everyday_cv, measured_free_fraction, observe, timing
from pkcalc.site import no_site
from pkcalc.steadiness import steady_pairs
from tests.unit.cases import PLAIN, levels, plain

PROFILE = load_profile("phenytoin")
DRAWN = "2026-12-01 07:00"


def seen(**changes: Any) -> tuple[Observation, ...]:
    return observe(plain(**changes), PROFILE, no_site())


def one(value: str, kind: str = "total", **more: Any) -> list[dict[str, Any]]:
    return [{"value": value, "kind": kind, "drawn": DRAWN, **more}]


@pytest.mark.parametrize(
    ("total", "albumin", "normalised"),
    [
        # Published examples of the 0.2 equation; printed answers.
        ("30 mg/L", "2.8 g/dL", "45.45"),  # a pharmacy licensing question of the week
        ("30 mg/L", "3 g/dL", "42.86"),  # a laboratory reference page prints 43
        ("7 mg/L", "2 g/dL", "14.00"),  # a board-style case set
        ("7 mg/L", "20 g/L", "14.00"),  # the same in SI units, a pathology test directory
    ],
)
def test_published_albumin_corrections(total: str, albumin: str, normalised: str) -> None:
    (o,) = seen(levels=one(total), albumin={"value": albumin})
    assert f"{o.working_mg_per_L:.2f}" == normalised
    assert o.binding_log_sd > 0


def test_above_the_break_point_nothing_is_corrected() -> None:
    """A published page corrects 30 mg/L at 4.6 g/dL down to 29: the equation is not valid there, and not used."""
    for albumin in ("45 g/L", "46 g/L", "60 g/L"):
        (o,) = seen(levels=one("30 mg/L"), albumin={"value": albumin})
        assert o.working_mg_per_L == 30
        assert o.steps == (f"albumin {albumin}: no correction needed",)
    (just_below,) = seen(levels=one("30 mg/L"), albumin={"value": "44.9 g/L"})
    assert just_below.working_mg_per_L > 30


def test_a_correction_never_lowers_and_more_albumin_never_raises() -> None:
    last = float("inf")
    for tenths in range(100, 600, 7):
        (o,) = seen(levels=one("12 mg/L"), albumin={"value": f"{tenths / 10} g/L"})
        assert 12 <= o.working_mg_per_L <= last
        last = o.working_mg_per_L


def test_a_free_level_is_preferred_and_never_called_normalised() -> None:
    (o,) = seen(levels=one("1.4 mg/L", "free"))
    assert o.working_mg_per_L == pytest.approx(14)
    assert o.steps == ("normalised total = free / 0.1 = 1.4 mg/L / 0.1 = 14 mg/L",)


def test_the_alternatives_are_shown_as_unvalidated() -> None:
    (o,) = seen(levels=one("7 mg/L"), albumin={"value": "20 g/L"})
    assert any("other published coefficients, unvalidated" in step for step in o.steps)


def test_molar_units_are_converted_in_the_open() -> None:
    (o,) = seen(levels=one("40 umol/L"))
    assert o.working_mg_per_L == pytest.approx(40 / 3.964, rel=1e-3)
    assert o.steps[0] == "40 umol/L = 10.09 mg/L"


def test_free_and_total_of_one_sample_count_once() -> None:
    both = [*one("8 mg/L"), *one("1.2 mg/L", "free")]
    total, free = seen(levels=both)
    assert total.set_aside == "level 2, the free level of the same sample, is used instead"
    assert free.usable
    assert measured_free_fraction((total, free)) == pytest.approx(0.15)
    consult = run_consult(plain(levels=both))
    assert consult.scale.total_factor == pytest.approx(8 / 12)
    assert "measured free fraction of 15 %" in consult.scale.words
    assert "free-fraction-measured" in {c.id for c in consult.cautions}
    assert "free-fraction-measured" not in {c.id for c in run_consult(plain()).cautions}


def test_a_level_entered_twice_is_used_once() -> None:
    first, second = seen(levels=[*one("8 mg/L"), *one("8 mg/L")])
    assert first.usable
    assert second.set_aside == "the same as level 1, entered twice"
    twice = {c.id for c in run_consult(plain(levels=[*one("8 mg/L"), *one("8 mg/L")])).cautions}
    assert "level-twice" in twice
    assert "levels-contradict" not in twice
    apart = {c.id for c in run_consult(plain(levels=[*one("8 mg/L"), *one("9 mg/L")])).cautions}
    assert "levels-contradict" in apart
    assert "level-twice" not in apart


def loaded(at: str, form: str = "injection", over: str = "20 min") -> list[dict[str, Any]]:
    line: dict[str, Any] = {"form": form, "amount": "500 mg", "at": at}
    if over:
        line["over"] = over
    if "fosphenytoin" in form:
        line["amount"] = "500 mg PE"
    return [*PLAIN["doses"], line]


@pytest.mark.parametrize(
    ("dose", "expected"),
    [
        (loaded("2026-12-01 06:50"), "during an infusion"),
        (loaded("2026-12-01 05:00"), "too early after a dose into a vein"),
        (loaded("2026-12-01 04:40"), "as usual"),
        (
            loaded("2026-12-01 03:30", "fosphenytoin-intramuscular", ""),
            "too early after a dose into a muscle",
        ),
        (loaded("2026-12-01 03:00", "fosphenytoin-intramuscular", ""), "as usual"),
        (loaded("2026-11-30 10:00", "extended-capsule", ""), "soon after a single dose by mouth"),
        (loaded("2026-11-30 06:59", "extended-capsule", ""), "as usual"),
    ],
)
def test_timing_after_loads(dose: list[dict[str, Any]], expected: str) -> None:
    case = plain(doses=dose, levels=one("8 mg/L"))
    assert timing(case.levels[0], case, PROFILE) == expected


def test_a_level_drawn_too_soon_after_a_load_is_set_aside() -> None:
    early = run_consult(plain(doses=loaded("2026-12-01 05:30"), levels=one("25 mg/L")))
    assert early.observations[0].set_aside == ("it was drawn too early after a dose to stand for the level in the body")
    assert "whole record" not in early.estimates
    assert "drawn-after-dose" in {c.id for c in early.cautions}
    later = run_consult(plain(doses=loaded("2026-12-01 01:00"), levels=one("25 mg/L")))
    assert "whole record" in later.estimates
    assert "drawn-after-dose" not in {c.id for c in later.cautions}


def test_an_oral_load_and_a_prompt_peak_are_said() -> None:
    oral = run_consult(plain(doses=loaded("2026-11-30 20:00", "extended-capsule", ""), levels=one("8 mg/L")))
    assert "after-oral-load" in {c.id for c in oral.cautions}
    prompt = [
        {
            "form": "suspension",
            "daily": [{"time": "06:00", "amount": "150 mg"}, {"time": "18:00", "amount": "150 mg"}],
            "from": "2026-09-01 06:00",
        }
    ]
    near = run_consult(plain(doses=prompt, levels=one("8 mg/L")))
    assert "drawn-near-peak" in {c.id for c in near.cautions}
    before = run_consult(
        plain(doses=prompt, levels=[{"value": "8 mg/L", "kind": "total", "drawn": "2026-12-01 05:45"}])
    )
    assert not {"drawn-near-peak", "after-oral-load"} & {c.id for c in before.cautions}


def test_a_level_from_before_the_record_is_set_aside() -> None:
    old = [{"value": "8 mg/L", "kind": "total", "drawn": "2026-08-01 07:00"}, PLAIN["levels"][1]]
    consult = run_consult(plain(levels=old))
    assert consult.observations[0].set_aside == "it was drawn before the record of doses begins"
    assert "level-before-record" in {c.id for c in consult.cautions}
    assert "level-before-record" not in {c.id for c in run_consult(plain()).cautions}


def test_an_unknown_draw_time_is_said() -> None:
    undated = [
        {"value": "8 mg/L", "kind": "total", "on_dose": 1},
        {"value": "20 mg/L", "kind": "total", "on_dose": 2},
    ]
    consult = run_consult(plain(levels=undated))
    ids = {c.id for c in consult.cautions}
    assert {"draw-time-unknown", "steadiness-unchecked"} <= ids
    assert set(consult.estimates) == {"two levels"}


def test_albumin_from_another_day_after_an_infusion_or_by_dye_is_said() -> None:
    def ids(**albumin: str) -> set[str]:
        return {c.id for c in run_consult(plain(levels=one("8 mg/L"), albumin={"value": "29 g/L", **albumin})).cautions}

    assert "albumin-old" in ids(taken="2026-11-28 07:00")
    assert "albumin-old" not in ids(taken="2026-11-29 07:00")
    assert "albumin-after-infusion" in ids(after_infusion="yes")
    assert "albumin-after-infusion" not in ids(after_infusion="no")
    assert "albumin-bcg" in ids(method="BCG")
    assert "albumin-bcg" not in ids(method="BCP")


def test_renal_failure_and_valproate_give_a_range_and_no_reading() -> None:
    (renal,) = seen(levels=one("8.2 mg/L"), albumin={"value": "22 g/L"}, context={"renal_failure": "yes"})
    assert not renal.readable
    # The 0.1 coefficient of the published renal form prints 25.6 mg/L; the 0.2 equation gives 15.2.
    assert f"{renal.high_mg_per_L:.1f}" == "25.6"
    assert renal.low_mg_per_L == pytest.approx(8.2 / 0.54)
    (valproate,) = seen(levels=one("10 mg/L", other_levels={"valproate": "80 mg/L"}), context={"valproate": "yes"})
    # Haidukewych 1989: free 1.75 mg/L; May 1991: free 1.30 mg/L.
    assert valproate.high_mg_per_L == pytest.approx(17.5)
    assert valproate.low_mg_per_L == pytest.approx(13.008)
    assert not valproate.readable
    (without,) = seen(levels=one("10 mg/L"), context={"valproate": "yes"})
    assert (without.low_mg_per_L, without.high_mg_per_L) == (10, 20)


def test_a_normalised_level_says_by_whom() -> None:
    (o,) = seen(levels=one("14 mg/L", "normalised", normalised_by="laboratory"), albumin={"value": "20 g/L"})
    assert o.working_mg_per_L == 14
    assert o.caveats == ("Level 1 was already normalised by laboratory: check which equation was used.",)
    ids = {c.id for c in run_consult(plain(levels=one("14 mg/L", "normalised", normalised_by="laboratory"))).cautions}
    assert "normalised-elsewhere" in ids
    assert "normalised-elsewhere" not in {c.id for c in run_consult(plain()).cautions}


def test_below_the_limit_is_censored() -> None:
    (o,) = seen(levels=one("<2.5 mg/L"))
    assert o.censored == "below"
    assert o.working_mg_per_L == 2.5
    both = plain(levels=levels("<2.5 mg/L", "20 mg/L"))
    assert [p.level for p in steady_pairs(both, PROFILE, observe(both, PROFILE, no_site()))] == [1]


def test_pregnancy_gives_no_single_reading_of_a_total() -> None:
    (o,) = seen(levels=one("9.4 mg/L"), context={"pregnancy": "yes"})
    assert not o.readable
    assert (o.low_mg_per_L, o.high_mg_per_L) == (9.4, 18.8)
    (free,) = seen(levels=one("0.94 mg/L", "free"), context={"pregnancy": "yes"})
    assert free.readable


def test_everyday_variation_is_the_own_spread_without_the_assay() -> None:
    assert everyday_cv(PROFILE, no_site(), 0.1) == pytest.approx(math.sqrt(PROFILE.spread.own_cv**2 - 0.01))
    # a coarser assay leaves nothing over
    assert everyday_cv(PROFILE, no_site(), 0.5) == 0.0
    # a file that does not say takes the total under observed dosing
    other = load_profile("theophylline")
    assert other.spread.own_cv == other.spread.total_cv["observed"]


def test_the_hospital_s_own_total_under_observed_dosing_wins() -> None:
    site = replace(no_site(), total_cv={"observed": 0.2})
    assert everyday_cv(PROFILE, site, 0.1) == pytest.approx(math.sqrt(0.03))
