"""The five teaching pictures and the clinic events: geometry, words, numbers by hand."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from pkcalc.estimate.events import MOVEMENTS, Patient, Sizes, clinic_events
from pkcalc.estimate.lines import DIRECT_LINEAR, SteadyPairs
from pkcalc.estimate.teaching import BANNER, LEVEL_AGAINST_DOSE, PICTURES, pictures, true_line

RATE = np.array([200.0, 250, 300, 350])
EXACT = SteadyPairs(RATE, 5 * RATE / (450 - RATE), np.full(4, 0.15), np.arange(4))
FALLING = SteadyPairs(np.array([200.0, 250, 300]), np.array([8.0, 6, 5]), np.full(3, 0.15), np.arange(3))
ONE_DOSE = SteadyPairs(np.full(3, 300.0), np.array([8.0, 9, 10]), np.full(3, 0.15), np.arange(3))

#: Vmax 450 mg/day, Km 5 mg/L, 300 mg/day: 10 mg/L by hand; 15 mg/L needs 450 x 15 / 20 = 337.5 mg/day.
PATIENT = Patient(vmax_mg_per_day=450, km_mg_per_L=5, dose_rate_mg_per_day=300, aim_mg_per_L=15, volume_L=45)


def by_name(found):
    return {item.name: item for item in found}


def crossing(first, second):
    """Where the straight lines through the first and last points of two traces cross."""
    (x1, x2), (y1, y2) = (first.x[0], first.x[-1]), (first.y[0], first.y[-1])
    (u1, u2), (v1, v2) = (second.x[0], second.x[-1]), (second.y[0], second.y[-1])
    a, c = (y2 - y1) / (x2 - x1), (v2 - v1) / (u2 - u1)
    x = (v1 - c * u1 - y1 + a * x1) / (a - c)
    return x, y1 + a * (x - x1)


def slope(trace):
    return (trace.y[-1] - trace.y[0]) / (trace.x[-1] - trace.x[0])


# --- pictures -----------------------------------------------------------------------------------------------


def test_five_pictures_of_the_same_pairs_in_their_order():
    found = pictures(EXACT)
    assert tuple(p.name for p in found) == PICTURES
    assert len(found) == 5
    assert all(p.reading == "Vmax 450 mg/day, Km 5 mg/L" for p in found)
    assert BANNER == "For teaching only, not for any patient: the sizes of all events are made up."


def test_axes_have_words_and_units():
    axes = {p.name: (p.x.words, p.x.unit, p.y.words, p.y.unit) for p in pictures(EXACT, repeats=0)}
    assert axes == {
        DIRECT_LINEAR: ("Km", "mg/L", "Vmax", "mg/day"),
        "double reciprocal": (
            "One divided by the steady level", "L/mg", "One divided by the dose rate", "day/mg",
        ),
        "C/R against C": ("Steady level", "mg/L", "Steady level divided by the dose rate", "day/L"),
        "R against R/C": (
            "Dose rate divided by the steady level (clearance)", "L/day", "Dose rate of active drug", "mg/day",
        ),
        LEVEL_AGAINST_DOSE: ("Dose rate of active drug", "mg/day", "Steady level", "mg/L"),
    }  # fmt: skip


def reading_points(name):
    found = by_name(pictures(EXACT, repeats=0))[name]
    return {trace.name: (trace.x[0], trace.y[0]) for trace in found.traces if trace.layer == "reading"}


def test_vmax_and_km_are_read_off_each_picture_as_its_words_say():
    assert reading_points(DIRECT_LINEAR)["medians"] == pytest.approx((5, 450))
    double = reading_points("double reciprocal")
    assert 1 / double["meets the vertical axis"][1] == pytest.approx(450)
    assert -1 / double["meets the horizontal axis"][0] == pytest.approx(5)
    assert -reading_points("C/R against C")["meets the horizontal axis"][0] == pytest.approx(5)
    fit = next(t for t in by_name(pictures(EXACT))["C/R against C"].traces if t.layer == "fit")
    assert 1 / slope(fit) == pytest.approx(450)
    assert reading_points("R against R/C")["meets the vertical axis"][1] == pytest.approx(450)
    fit = next(t for t in by_name(pictures(EXACT))["R against R/C"].traces if t.layer == "fit")
    assert -slope(fit) == pytest.approx(5)
    curve = reading_points(LEVEL_AGAINST_DOSE)
    assert curve["half of Vmax"] == pytest.approx((225, 5))
    assert curve["the dose rate the curve never reaches"][0] == pytest.approx(450)
    for picture in pictures(EXACT):
        assert "Vmax is" in picture.how_read or "Vmax axis" in picture.how_read


def test_each_line_of_the_direct_linear_plot_meets_the_axes_at_minus_the_level_and_at_the_dose():
    lines = [t for t in by_name(pictures(EXACT, repeats=0))[DIRECT_LINEAR].traces if t.layer == "line"]
    assert len(lines) == 4
    for at, line in enumerate(lines):
        assert (line.x[0], line.y[0]) == pytest.approx((-EXACT.level_mg_per_L[at], 0))
        assert (line.x[1], line.y[1]) == pytest.approx((0, RATE[at]))
        assert line.name == EXACT.words(at)
    for other in lines[1:]:
        assert crossing(lines[0], other) == pytest.approx((5, 450))


def test_rows_are_ready_for_a_table():
    rows = [row for picture in pictures(EXACT) for row in picture.rows()]
    assert {tuple(row) for row in rows} == {("picture", "layer", "name", "order", "x", "y")}
    assert {row["picture"] for row in rows} == set(PICTURES)
    assert all(isinstance(row["x"], float) and math.isfinite(row["x"]) for row in rows)
    assert all(isinstance(row["y"], float) and math.isfinite(row["y"]) for row in rows)
    layers = {row["layer"] for row in rows}
    assert layers == {"pair", "line", "fit", "crossing", "reading", "repeat"}


def test_repeats_show_what_the_spread_of_the_levels_does():
    wide, narrow = by_name(pictures(EXACT)), by_name(pictures(EXACT, log_sd=np.full(4, 0.03)))
    for name in PICTURES:
        assert wide[name].repeats.startswith(("In 24 of 24 redrawn sets Vmax is read from ", "In 2"))
        assert narrow[name].repeats.startswith("In 24 of 24 redrawn sets Vmax is read from ")
        assert sum(t.layer == "repeat" for t in narrow[name].traces) == 24
    assert narrow["double reciprocal"].repeats != wide["double reciprocal"].repeats
    assert all(p.repeats == "" for p in pictures(EXACT, repeats=0))


def test_a_picture_that_fails_says_why_and_reads_nothing():
    found = by_name(pictures(FALLING))
    assert found["double reciprocal"].reading == (
        "Double reciprocal: this line fails on these data, because it would read Km -2.87 mg/L, which is "
        "impossible; level 1 (200 mg/day, 8 mg/L) alone has 54 % of the pull on this line."
    )
    assert found["double reciprocal"].repeats == "None of 24 redrawn sets gives a possible answer."
    for picture in found.values():
        assert not [t for t in picture.traces if t.layer == "reading"]
    assert all(p.repeats == "" for p in pictures(ONE_DOSE))


# --- what moves, against the geometry ------------------------------------------------------------------------


def event(name, **sizes):
    return by_name(clinic_events(PATIENT, Sizes(**sizes)))[name]


def before_after(found, picture):
    return found.traces[picture][0], found.traces[picture][1]


@pytest.mark.parametrize("name", ["inducer started", "inhibitor started"])
def test_a_changed_vmax_turns_the_reciprocal_line_about_its_x_intercept(name):
    """Common practice, no source; here from the lines that are drawn."""
    found = event(name)
    assert crossing(*before_after(found, "double reciprocal")) == pytest.approx((-1 / 5, 0), abs=1e-12)
    assert crossing(*before_after(found, "C/R against C")) == pytest.approx((-5, 0), abs=1e-12)
    first, second = before_after(found, "R against R/C")
    assert slope(first) == pytest.approx(slope(second))
    first, second = before_after(found, DIRECT_LINEAR)
    assert first.x == second.x
    steeper = slope(before_after(found, "double reciprocal")[1]) > slope(before_after(found, "double reciprocal")[0])
    assert steeper == (name == "inhibitor started")
    words = found.movement["double reciprocal"]
    assert "about its x-intercept" in words
    assert ("steeper" in words) == steeper


def test_a_higher_km_turns_the_reciprocal_line_about_its_y_intercept():
    """Common practice, no source; here from the lines that are drawn."""
    found = event("reversible competitor started")
    assert crossing(*before_after(found, "double reciprocal")) == pytest.approx((0, 1 / 450), abs=1e-12)
    assert crossing(*before_after(found, "R against R/C")) == pytest.approx((0, 450), abs=1e-9)
    first, second = before_after(found, "C/R against C")
    assert slope(first) == pytest.approx(slope(second))
    assert second.y[0] > first.y[0]
    first, second = before_after(found, DIRECT_LINEAR)
    assert first.y == second.y
    assert second.x[0] > first.x[0]
    assert found.movement["double reciprocal"] == (
        "The line turns up about its y-intercept, one divided by Vmax: steeper."
    )


def test_every_movement_is_told_for_every_named_picture():
    for movement in MOVEMENTS.values():
        assert set(movement) == set(PICTURES)
        assert all(sentence.endswith(".") and len(sentence) > 20 for sentence in movement.values())


@pytest.mark.parametrize("name", ["new salt", "missed week"])
def test_a_new_salt_or_a_missed_week_leaves_the_line_and_moves_the_point(name):
    found = event(name)
    assert (found.vmax_mg_per_day, found.km_mg_per_L) == (450, 5)
    for picture in PICTURES[1:]:
        line, before, moved = found.traces[picture]
        assert before.layer == "before"
        if picture == LEVEL_AGAINST_DOSE:
            continue
        off_line = moved.y[0] - (line.y[0] + slope(line) * (moved.x[0] - line.x[0]))
        on_line = before.y[0] - (line.y[0] + slope(line) * (before.x[0] - line.x[0]))
        assert on_line == pytest.approx(0, abs=1e-12 + 1e-12 * abs(before.y[0]))
        if name == "new salt":
            assert off_line == pytest.approx(0, abs=1e-12 + 1e-12 * abs(moved.y[0]))
        else:
            assert abs(off_line) > 1e-3 * abs(moved.y[0])


def moved_words(found, picture):
    _, before, after = found.traces[picture]
    up = "up" if after.y[0] > before.y[0] else "down"
    side = "right" if after.x[0] > before.x[0] else "left"
    return f"{up} and to the {side}"


@pytest.mark.parametrize("ratio", [1.09, 0.9])
def test_the_words_for_a_new_salt_match_the_way_the_point_moves(ratio):
    found = event("new salt", new_salt=ratio)
    for picture in ("double reciprocal", "C/R against C", "R against R/C"):
        assert moved_words(found, picture) in found.movement[picture]
    assert ("moves up along it" in found.movement[LEVEL_AGAINST_DOSE]) == (ratio > 1)


# --- numbers by hand ----------------------------------------------------------------------------------------


def test_inducer_by_hand():
    found = event("inducer started", inducer=1.2)  # Vmax 540
    assert found.level_before_mg_per_L == pytest.approx(10)
    assert found.level_after_mg_per_L == pytest.approx(5 * 300 / 240)  # 6.25
    assert found.dose_before_mg_per_day == pytest.approx(337.5)
    assert found.dose_after_mg_per_day == pytest.approx(405)  # 540 x 15 / 20
    assert found.text == (
        "On 300 mg/day the steady level goes from 10 mg/L to 6.25 mg/L. To hold 15 mg/L it now takes 405 "
        "mg/day instead of 338 mg/day."
    )


def test_inhibitor_by_hand_up_to_no_steady_level():
    mild = event("inhibitor started", inhibitor=0.8)  # Vmax 360
    assert mild.level_after_mg_per_L == pytest.approx(25)
    assert mild.dose_after_mg_per_day == pytest.approx(270)
    strong = event("inhibitor started", inhibitor=0.64)  # Vmax 288, below the dose
    assert strong.level_after_mg_per_L is None
    assert strong.text == (
        "On 300 mg/day the steady level goes from 10 mg/L to no steady level: the dose is more than the "
        "body can remove. To hold 15 mg/L it now takes 216 mg/day instead of 338 mg/day."
    )


def test_competitor_by_hand():
    found = event("reversible competitor started", competitor=1.5)  # Km 7.5
    assert found.level_after_mg_per_L == pytest.approx(15)
    assert found.dose_after_mg_per_day == pytest.approx(300)  # 450 x 15 / 22.5
    assert found.story == ("Another drug competes for the same enzyme: Km is 1.5 times what it was, Vmax the same.")


def test_new_salt_by_hand():
    found = event("new salt", new_salt=1.1)  # 330 mg/day active: 5 x 330 / 120 = 13.75
    assert found.level_after_mg_per_L == pytest.approx(13.75)
    assert found.dose_after_mg_per_day == pytest.approx(337.5 / 1.1)
    assert found.story == (
        "The same labelled dose now holds 10 % more active drug. Vmax and Km are the patient's and stay; "
        "dose rates in every picture are of active drug."
    )


def test_missed_week_against_an_independent_solver():
    from scipy.integrate import solve_ivp

    found = event("missed week")

    def run(start, dose, days):
        course = solve_ivp(
            lambda _, c: (dose - 450 * c / (5 + c)) / 45,
            (0, days),
            [start],
            method="DOP853",
            rtol=1e-12,
            atol=1e-14,
        )
        return float(course.y[0, -1])

    level = run(run(10, 0, 7), 300, 7)
    assert found.level_after_mg_per_L == pytest.approx(level, rel=1e-8)
    assert found.dose_after_mg_per_day == found.dose_before_mg_per_day == pytest.approx(337.5)
    false_vmax = 300 + 5 * 300 / level
    asked = false_vmax * 15 / 20
    reached = 5 * asked / (450 - asked)
    assert found.text == (
        f"The level falls from 10 mg/L to less than 0.1 mg/L and is {level:.3g} mg/L when drawn. The dose "
        f"that holds 15 mg/L is still 338 mg/day. Taken for steady, the level would ask for {asked:.0f} "
        f"mg/day, and on that the patient would come to {reached:.3g} mg/L (Km held)."
    )
    assert reached > 15


def test_a_level_drawn_at_once_asks_for_no_sensible_dose():
    found = event("missed week", restarted_days=0.0)
    assert "would ask for more than 5 times the present dose, which is no answer (Km held)." in found.text
    assert event("missed doses", missed_days=3.0).name == "missed doses"


def test_without_a_volume_there_is_no_missed_week():
    patient = Patient(vmax_mg_per_day=450, km_mg_per_L=5, dose_rate_mg_per_day=300, aim_mg_per_L=15)
    assert [e.name for e in clinic_events(patient)] == [
        "inducer started",
        "inhibitor started",
        "reversible competitor started",
        "new salt",
    ]


@pytest.mark.parametrize("dose", [300.0, 449.0, 460.0])
def test_events_on_any_dose_never_show_a_machine_word(dose):
    patient = Patient(vmax_mg_per_day=450, km_mg_per_L=5, dose_rate_mg_per_day=dose, aim_mg_per_L=15, volume_L=45)
    for found in clinic_events(patient):
        for text in (found.story, found.text, *found.movement.values()):
            for machine_word in ("nan", "inf ", "{", "}", "None", "e+", "_"):
                assert machine_word not in text
        for traces in found.traces.values():
            assert all(np.isfinite(trace.x).all() and np.isfinite(trace.y).all() for trace in traces)


def test_the_true_curve_passes_through_half_of_vmax_at_km():
    curve = true_line(LEVEL_AGAINST_DOSE, vmax=450, km=5, layer="before", beside_km=5)
    assert np.interp(5.0, curve.y, curve.x) == pytest.approx(225, rel=1e-3)
    assert max(curve.x) < 450


def test_a_steady_level_beyond_what_is_told_in_numbers_stands_in_words() -> None:
    # 300 mg/day is at 10 mg/L (Vmax 450, Km 5); with Vmax x 0.75 it would settle at 40 mg/L
    inhibitor = next(e for e in clinic_events(PATIENT) if e.name == "inhibitor started")
    assert inhibitor.level_after_mg_per_L == pytest.approx(40.0)
    assert "from 10 mg/L to 40 mg/L." in inhibitor.text
    capped = replace(PATIENT, told_up_to_mg_per_L=30.0)
    inhibitor = next(e for e in clinic_events(capped) if e.name == "inhibitor started")
    assert "from 10 mg/L to above 30 mg/L." in inhibitor.text
