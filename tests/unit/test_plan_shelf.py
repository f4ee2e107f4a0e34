"""The shelf: what stands on it, what can be made of it, and how that is said."""

from __future__ import annotations

from dataclasses import replace

import pytest

from pkcalc.plan.shelf import (
    Dispensable,
    Part,
    dispensable,
    dispense_words,
    into_a_vein,
    made_from,
    oral,
    part_words,
    regimen_words,
    shelf_in_use,
)
from pkcalc.site import no_site
from tests.unit.cases import plain
from tests.unit.planning import profile
from tests.unit.shelf_rules import active_per_day, broken_rules, every_regimen, simplicity

P = profile()
US = P.shelves["united-states"].products


def parts(made: Dispensable) -> list[dict[str, float]]:
    return [{p.product: p.units for p in dose} for dose in made.doses]


@pytest.mark.parametrize(
    "shelf",
    [
        ("extended-capsule-100",),
        ("extended-capsule-30", "extended-capsule-100"),
        ("extended-capsule-100", "chewable-50"),
        ("prompt-capsule-50", "prompt-capsule-300"),
        ("suspension-125",),
    ],
)
def test_the_list_is_what_brute_force_finds(shelf: tuple[str, ...]) -> None:
    """Same active amounts, and for each the simplest regimen, on shelves small enough to try everything."""
    largest = 331.2
    simplest: dict[float, tuple[float, ...]] = {}
    for doses in every_regimen(shelf, largest, P):
        amount = round(active_per_day(doses, 1, P), 6)
        rank = simplicity(doses, P)
        simplest[amount] = min(simplest.get(amount, rank), rank)
    found = dispensable(P, shelf, largest_active_mg_per_day=largest)
    # four doses a day are left out of the brute force (only forms given every 6 h have them)
    three = [m for m in found if len(m.doses) <= 3]
    assert {round(m.active_mg_per_day, 6) for m in three} >= set(simplest)
    for made in three:
        assert simplicity(parts(made), P) == simplest[round(made.active_mg_per_day, 6)], dispense_words(made, P)


@pytest.mark.parametrize("shelf", list(P.shelves))
def test_everything_listed_can_be_made_from_the_shelf(shelf: str) -> None:
    products = P.shelves[shelf].products
    for some in (oral(products, P), into_a_vein(products, P)):
        for made in dispensable(P, some, largest_active_mg_per_day=552.0, alternate_days=True):
            assert broken_rules(parts(made), made.days, products, P) == [], dispense_words(made, P)
            assert active_per_day(parts(made), made.days, P) == pytest.approx(made.active_mg_per_day)


def test_no_two_regimens_deliver_the_same_amount() -> None:
    found = dispensable(P, oral(US, P), largest_active_mg_per_day=552.0)
    amounts = [round(m.active_mg_per_day, 6) for m in found]
    assert len(amounts) == len(set(amounts))
    assert amounts == sorted(amounts)
    assert len(found) > 200


def test_the_checker_finds_what_is_wrong() -> None:
    assert "more than two products" in broken_rules(
        [{"extended-capsule-30": 1, "extended-capsule-100": 1, "chewable-50": 1}], 1, US, P
    )
    assert "chewable-tablet at an interval it is not given at" in broken_rules([{"chewable-50": 2}], 1, US, P)
    assert "a unit split further than it may be" in broken_rules([{"extended-capsule-100": 1.5}], 1, US, P)
    assert "not on the shelf" in broken_rules([{"suspension-30": 5}, {"suspension-30": 5}], 1, US, P)


def test_only_extended_capsules_go_once_daily() -> None:
    for made in dispensable(P, oral(US, P), largest_active_mg_per_day=552.0):
        if made.times_a_day == 1:
            assert made.forms(P) == ("extended-capsule",)


def test_alternate_days_only_where_the_site_allows_them() -> None:
    capsules = [p for p in US if "capsule" in p]
    without = dispensable(P, capsules, largest_active_mg_per_day=552.0)
    allowed = dispensable(P, capsules, largest_active_mg_per_day=552.0, alternate_days=True)
    assert all(m.days == 1 for m in without)
    extra = [m for m in allowed if m.days == 2]
    assert extra
    amounts = {round(m.active_mg_per_day, 6) for m in without}
    assert not amounts & {round(m.active_mg_per_day, 6) for m in extra}
    example = next(m for m in extra if parts(m) == [{"extended-capsule-30": 1}, {"extended-capsule-30": 2}])
    assert dispense_words(example, P) == "1 capsule of 30 mg and 2 capsules of 30 mg on alternate days"
    assert example.active_mg_per_day == pytest.approx(45 * 0.92)


@pytest.mark.parametrize(
    ("made", "words", "dispensed"),
    [
        (
            Dispensable(((Part("extended-capsule-300", 1), Part("extended-capsule-30", 2)),), 1, 331.2),
            "360 mg extended capsules (phenytoin sodium) once daily",
            "1 capsule of 300 mg and 2 capsules of 30 mg once daily",
        ),
        (
            Dispensable(((Part("extended-capsule-100", 1),), (Part("extended-capsule-100", 2),)), 1, 276),
            "100 mg extended capsules (phenytoin sodium) in the morning and 200 mg extended capsules (phenytoin "
            "sodium) at night",
            "1 capsule of 100 mg in the morning and 2 capsules of 100 mg at night",
        ),
        (
            Dispensable(((Part("suspension-125", 6),),) * 2, 1, 300),
            "150 mg oral suspension (phenytoin acid) every 12 h",
            "6 mL of oral suspension, 125 mg in 5 mL (150 mg) every 12 h",
        ),
        (
            Dispensable(
                ((Part("chewable-50", 0.5),), (Part("chewable-50", 1.5),), (Part("chewable-50", 1.5),)), 1, 175
            ),
            "25 mg chewable tablets (phenytoin acid) in the morning, 75 mg chewable tablets (phenytoin acid) in the "
            "afternoon and 75 mg chewable tablets (phenytoin acid) at night",
            "half a tablet of 50 mg in the morning, 1 and a half tablets of 50 mg in the afternoon and 1 and a half "
            "tablets of 50 mg at night",
        ),
    ],
)
def test_a_regimen_in_words(made: Dispensable, words: str, dispensed: str) -> None:
    assert regimen_words(made, P) == words
    assert dispense_words(made, P) == dispensed


def test_strengths_are_never_confused_in_words() -> None:
    """The fourfold mix-up: the same volume of the two suspensions, each with its concentration and its mg."""
    assert part_words(Part("suspension-125", 5), P) == "5 mL of oral suspension, 125 mg in 5 mL (125 mg)"
    assert part_words(Part("suspension-30", 5), P) == "5 mL of oral suspension, 30 mg in 5 mL (30 mg)"


def test_one_strength_of_the_suspension_on_every_shelf() -> None:
    for shelf in P.shelves.values():
        assert len([p for p in shelf.products if P.products[p].exclusive_group == "oral suspension"]) == 1


def test_no_shelf_is_preselected() -> None:
    found = shelf_in_use(plain(), P, no_site())
    assert found.products == ()
    assert found.sentences == (
        "No shelf is chosen, so no regimens are listed. Choose one (United States, generic strengths or United "
        "Kingdom, generic strengths) or a site file: a regimen is made of units that can be dispensed.",
    )


def test_the_case_chooses_and_restricts() -> None:
    plan = {"shelf": "united-states", "products": ["extended-capsule-100", "extended-capsule-30"]}
    found = shelf_in_use(plain(plan=plan), P, no_site())
    assert found.products == ("extended-capsule-30", "extended-capsule-100")
    assert found.sentences == ("Restricted to 30 mg extended capsule, 100 mg extended capsule.",)


def test_the_site_chooses_and_restricts() -> None:
    site = replace(no_site(), shelf="united-kingdom", products=("prompt-capsule-50",))
    assert shelf_in_use(plain(), P, site).products == ("prompt-capsule-50",)
    other = shelf_in_use(plain(plan={"shelf": "united-states"}), P, site)
    assert other.products == US


def test_the_site_adds_to_its_own_shelf() -> None:
    site = replace(no_site(), file="ours.toml", shelf="united-kingdom", products=("prompt-capsule-50",))
    site = replace(site, added_products=("extended-capsule-30",))
    found = shelf_in_use(plain(), P, site)
    assert found.products == ("prompt-capsule-50", "extended-capsule-30")
    assert found.sentences == ("Restricted to 50 mg capsule.", "Added by ours.toml: 30 mg extended capsule.")
    assert shelf_in_use(plain(plan={"shelf": "united-states"}), P, site).products == US
    only = shelf_in_use(plain(plan={"shelf": "united-kingdom", "products": ["chewable-50"]}), P, site)
    assert only.products == ("chewable-50",)


def test_capsules_do_not_go_down_a_tube() -> None:
    found = shelf_in_use(plain(plan={"shelf": "united-states"}, context={"tube_feed": "yes"}), P, no_site())
    assert found.products == ("suspension-125", "injection-50", "fosphenytoin-50")
    assert found.sentences == (
        "Tube fed: left out because they may not go down a feeding tube (never open or crush them): 30 mg extended "
        "capsule, 100 mg extended capsule, 200 mg extended capsule, 300 mg extended capsule, 50 mg chewable tablet.",
    )


def test_a_typed_dose_is_made_with_the_fewest_units() -> None:
    assert made_from(360, "extended-capsule", US, P) == (
        Part("extended-capsule-30", 2),
        Part("extended-capsule-300", 1),
    )
    assert made_from(300, "extended-capsule", US, P) == (Part("extended-capsule-300", 1),)
    assert made_from(350, "extended-capsule", US, P) is None
    assert made_from(75, "chewable-tablet", US, P) == (Part("chewable-50", 1.5),)
    assert made_from(162.5, "suspension", US, P) == (Part("suspension-125", 6.5),)
    assert made_from(160, "suspension", US, P) is None
