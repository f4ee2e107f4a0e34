"""What a plan must never do in silence: unasked loads, refused forms, unmarked offers, chances without their time."""

from __future__ import annotations

from typing import Any

from pkcalc.consult import patient_prior
from pkcalc.plan import _volume_words
from pkcalc.plan.loading import rate_caps
from pkcalc.site import no_site
from tests.unit.cases import plain
from tests.unit.planning import exact, plan, profile, setting
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
        "Maintenance goes on: 300 mg extended capsules (phenytoin sodium) daily.",
    )


def test_on_maintenance_a_load_by_mouth_does_not_replace_it() -> None:
    (load,) = low(plan=asked("extended-capsule")).loads
    assert (
        "Maintenance goes on as well: 300 mg extended capsules (phenytoin sodium) daily; the load does not replace it."
        in load.order
    )
    (first,) = low(doses=[], levels=[], plan=asked("extended-capsule")).loads
    assert "Maintenance begins 24 h after the first part." in first.order


def test_a_load_of_suspension_says_why_there_is_none() -> None:
    found = low(plan=asked("suspension"))
    assert found.loads == ()
    assert found.no_load == (
        "No load of oral suspension (phenytoin acid): the published load by mouth is in capsules or tablets whose size "
        "divides its parts (400, 300, 300 mg); ask for such a form, or for one into a vein.",
    )


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
