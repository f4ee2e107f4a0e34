"""What a plan must never do in silence: unasked loads, refused forms, unmarked offers, chances without their time."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from pkcalc import formulas
from pkcalc.consult import patient_prior
from pkcalc.dosing import Intake, Regimen
from pkcalc.forecast import fewer_draws
from pkcalc.plan import _volume_words
from pkcalc.plan.candidates import candidates, danger_at_draw
from pkcalc.plan.loading import rate_caps
from pkcalc.site import no_site
from pkcalc.units import percent_beside
from tests.unit.cases import plain
from tests.unit.planning import estimate, exact, plan, profile, setting
from tests.unit.test_plan_loading import LOW, asked


def low(**changes: Any) -> Any:
    return plan(None, changes.pop("est", exact()), **{**LOW, "context": {}, **changes})


def test_no_load_unless_one_is_asked_for() -> None:
    found = low()
    assert found.loads == ()
    assert found.no_load == ()


def test_a_load_smaller_than_one_usual_dose_is_refused() -> None:
    found = low(plan=asked("extended-capsule", aim="10 mg/L"))
    assert found.loads == ()
    assert found.no_load == (
        "No load: 98 mg of active drug would do, which is less than one usual dose (276 mg of active drug). "
        "Maintenance alone: 300 mg extended capsules (phenytoin sodium) daily.",
    )


def test_on_maintenance_a_load_by_mouth_does_not_replace_it() -> None:
    (load,) = low(plan=asked("extended-capsule")).loads
    assert (
        "Maintenance goes on as well: 300 mg extended capsules (phenytoin sodium) daily; the load does not replace it."
        in load.order
    )
    (first,) = low(doses=[], levels=[], plan=asked("extended-capsule")).loads
    assert "Maintenance begins 24 h after the first part (from 2 Dec 2026 10:00)." in first.order
    planned = {**asked("extended-capsule"), "start": "2026-12-01 21:00"}
    (soon,) = low(doses=[], levels=[], plan=planned).loads
    assert (
        "Maintenance begins 24 h after the first part (from 2 Dec 2026 21:00): not at 1 Dec 2026 21:00 as planned, but "
        "with the first dose due after that."
    ) in soon.order


def test_a_load_of_a_size_that_does_not_fit_says_why_there_is_none() -> None:
    found = low(plan={**asked("extended-capsule"), "products": ["extended-capsule-30"]})
    assert found.loads == ()
    assert found.no_load == (
        "No load of extended capsules (phenytoin sodium): none on the shelf in use has a size that divides the parts "
        "of the published load by mouth (400, 300, 300 mg), and none is a liquid of one strength; ask for another "
        "form, or for one into a vein.",
    )


def test_no_increase_while_the_level_is_above_the_target() -> None:
    """21 mg/L and plenty of room by the estimate: still no step up, and none is told."""
    high = low(est=exact(vmax=900.0), levels=[{"value": "21 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}])
    said = "The level today is above 20 mg/L, the top of the target: no increase."
    assert said in high.lines
    assert not any(x.startswith("Largest step") for x in high.lines)
    assert high.present is not None
    more = [c for c in high.every if c.rate_mg_per_day > high.present.rate_mg_per_day]
    assert more
    assert all(not c.offered and said in c.why_not for c in more)
    assert high.present.offered
    within = low(est=exact(vmax=900.0), levels=[{"value": "19 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}])
    assert said not in within.lines
    assert any(x.startswith("Largest step") for x in within.lines)


def test_a_childs_own_cap_is_not_called_faster_than_that_of_heart_disease() -> None:
    child = plain(patient={"age": "6 years", "weight": "18 kg", "sex": "male"})
    caps, notes = rate_caps(child, profile(), no_site(), "injection")
    assert notes == []
    assert caps
    heavy = plain(patient={"age": "12 years", "weight": "45 kg", "sex": "male"})
    assert rate_caps(heavy, profile(), no_site(), "injection")[1] == [
        "Heart disease is not stated. With it, the slower rate holds (elderly or heart disease: at most 25 mg/min)."
    ]


def test_the_weight_of_the_volume_is_explained_beside_a_load() -> None:
    case = plain(patient={"age": "45 years", "sex": "female", "weight": "140 kg", "height": "157 cm"})
    prior = patient_prior(case, profile(), no_site())
    words = _volume_words(case, setting(exact(volume=118.7)), prior)
    assert words == (
        "The volume (119 L) counts 170 kg for an actual weight of 140 kg: in obesity the drug spreads into the excess "
        "weight more than in proportion, so the load per kg of actual weight is higher; the ceiling per kg still counts "
        "actual weight."
    )
    assert _volume_words(plain(), setting(), patient_prior(plain(), profile(), no_site())) == ""


@pytest.mark.parametrize(
    ("share", "words"),
    [
        (0.1, "10 %"),
        (0.1004, "10.04 %"),
        (0.10000004, "just above 10 %"),
        (0.104, "10.4 %"),
        (0.62, "62 %"),
        (0.05, "5 %"),
    ],
)
def test_a_chance_just_above_its_limit_is_told_from_it(share: float, words: str) -> None:
    assert percent_beside(share, 0.1) == words


def test_each_chance_of_too_high_has_its_time() -> None:
    """From 38 mg/L, 276 mg/day of 450: the plateau is 7.9 mg/L, but three days later the level is still high."""
    regimen = Regimen((Intake("extended-capsule", 21.0, 300.0),))
    given = [(regimen, "300 mg", "", True, False)]
    toxic = setting(exact(), start_mg_per_L=np.full(8, 38.0), draw_days=1.0)
    (c,) = candidates([], given, toxic)
    assert (c.danger_at_plateau, c.danger_at_draw, c.danger) == (0.0, 1.0, 1.0)
    assert c.why_not == (
        "The level is high today: at the next feasible draw, in 1 days, the chance of a level above 30 mg/L is still "
        "more than 99 %, above the limit of 10 %.",
    )
    rising = setting(exact(vmax=270.0), start_mg_per_L=np.full(8, 8.0), draw_days=3.0)
    (c,) = candidates([], given, rising)
    assert (c.danger_at_plateau, c.danger_at_draw, c.danger) == (1.0, 0.0, 1.0)
    assert c.why_not[0] == (
        "Taken in full, the chance of a level above 30 mg/L or of no steady state once settled is more than 99 %, above the limit "
        "of 10 %."
    )
    (c,) = candidates([], given, setting(exact(volume=None)))
    assert c.danger_at_draw is None


def test_the_chance_at_the_draw_is_the_share_of_the_courses_above() -> None:
    many = estimate(vmax=330.0)
    one = setting(many, start_mg_per_L=25.0, draw_days=6.0)
    few = fewer_draws(many, 512).estimate
    then = formulas.level_after(
        time_day=6.0,
        start_mg_per_L=25.0,
        dose_rate_mg_per_day=400.0,
        vmax_mg_per_day=few.vmax_mg_per_day,
        km_mg_per_L=few.km_mg_per_L,
        volume_L=few.volume_L,
    )
    share = float((then > 30.0) @ few.weights)
    found = danger_at_draw(one, [400.0])
    assert found is not None
    assert 0.05 < share < 0.95
    assert found[0] == pytest.approx(share)
