"""The rules of making a regimen, written a second time, independent of the enumerator: a checker and a brute force."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import combinations, product

from pkcalc.drugs.profile import Profile

#: One dose time: units by product id.
Dose = dict[str, float]


def active_per_day(doses: Sequence[Dose], days: int, profile: Profile) -> float:
    total = 0.0
    for dose in doses:
        for name, units in dose.items():
            p = profile.products[name]
            f = profile.forms[p.form]
            total += units * p.mg_per_unit * f.salt_factor * f.bioavailability
    return total / days


def broken_rules(doses: Sequence[Dose], days: int, shelf: Sequence[str], profile: Profile) -> list[str]:
    """Every rule that a regimen breaks; empty where it can be dispensed from the shelf."""
    broken = []
    used = {name for dose in doses for name in dose}
    times = len(doses) // days
    if used - set(shelf):
        broken.append("not on the shelf")
    if len(used) > 2:
        broken.append("more than two products")
    units_of = {profile.products[name].unit for name in used}
    if "mL" in units_of and len(used) > 1:
        broken.append("a liquid with something else")
    groups = [profile.products[n].exclusive_group for n in used if profile.products[n].exclusive_group]
    if len(groups) != len(set(groups)):
        broken.append("two strengths of one liquid")
    for dose in doses:
        if not dose or any(u <= 0 for u in dose.values()):
            broken.append("an empty dose time")
        for name, units in dose.items():
            p = profile.products[name]
            steps = units / p.smallest_step
            if abs(steps - round(steps)) > 1e-9:
                broken.append("a unit split further than it may be")
            if units > (60 if p.unit == "mL" else 4):
                broken.append("too much at one time")
    if "mL" in units_of and len({tuple(sorted(d.items())) for d in doses}) > 1:
        broken.append("unequal volumes")
    for form in {profile.products[n].form for n in used}:
        given = sum(any(profile.products[n].form == form for n in dose) for dose in doses)
        intervals = profile.forms[form].intervals_h
        if days == 2:
            allowed = 24.0 in intervals
        else:
            allowed = (given == times and 24.0 / times in intervals) or (given == 1 and 24.0 in intervals)
        if not allowed:
            broken.append(f"{form} at an interval it is not given at")
    sizes = [active_per_day([d], 1, profile) for d in doses]
    if max(sizes) > 3 * min(sizes) + 1e-9:
        broken.append("doses too unequal")
    return broken


def every_regimen(shelf: Sequence[str], largest: float, profile: Profile) -> Iterator[list[Dose]]:
    """Brute force: every way to put units of one or two products at one to four times a day, kept where no rule is
    broken. For small shelves only."""
    for some in [*combinations(shelf, 1), *combinations(shelf, 2)]:
        grids = []
        for name in some:
            p = profile.products[name]
            active = p.mg_per_unit * profile.forms[p.form].salt_factor * profile.forms[p.form].bioavailability
            most = min(60 if p.unit == "mL" else 4, largest / active)
            grids.append([k * p.smallest_step for k in range(int(most / p.smallest_step + 1e-9) + 1)])
        one_time = [
            {n: u for n, u in zip(some, units, strict=True) if u > 0} for units in product(*grids) if any(units)
        ]
        for times in (1, 2, 3):
            for doses in product(one_time, repeat=times):
                if active_per_day(doses, 1, profile) <= largest + 1e-9 and not broken_rules(doses, 1, shelf, profile):
                    yield list(doses)


def simplicity(doses: Sequence[Dose], profile: Profile) -> tuple[float, ...]:
    """Smaller is simpler: dose times, products, unequal doses, units of solids a day, difference between doses."""
    sizes = [active_per_day([d], 1, profile) for d in doses]
    solids = sum(u for d in doses for n, u in d.items() if profile.products[n].unit != "mL")
    return (
        len(doses),
        len({n for d in doses for n in d}),
        float(max(sizes) - min(sizes) > 1e-9),
        solids,
        round(max(sizes) - min(sizes), 6),
    )
