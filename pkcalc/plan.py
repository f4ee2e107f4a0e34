"""Regimens that can be dispensed around the present dose."""

from __future__ import annotations

from itertools import product

from pkcalc.case import Case, Course
from pkcalc.dosing import Intake, Regimen
from pkcalc.drugs.profile import Profile
from pkcalc.site import Site


def present_course(case: Case) -> Course | None:
    """The line of the record in force now: the last repeated one that has not ended."""
    going = [c for c in case.courses if c.regimen is not None and c.counts_as_given and c.end is None]
    dated = [c for c in going if c.start is not None]
    if dated:
        return max(dated, key=lambda c: c.start.timestamp() if c.start else 0.0)
    return going[-1] if going else None


def is_present(regimen: Regimen, case: Case, profile: Profile) -> bool:
    """True where a regimen delivers the same active amount per day as the present one."""
    course = present_course(case)
    if course is None or course.regimen is None:
        return False
    now = course.regimen.active_mg_per_day(profile)
    return abs(regimen.active_mg_per_day(profile) - now) <= 1e-6 * now


def dose_table(case: Case, profile: Profile, site: Site) -> tuple[Regimen, ...]:
    """Daily doses of the present form that its marketed units can make, around the present dose, by size."""
    course = present_course(case)
    if course is None or course.regimen is None:
        return ()
    form = course.regimen.intakes[0].form
    sizes = profile.unit_sizes_mg(form)
    now = course.regimen.labelled_mg_per_day()
    totals = {now}
    for counts in product(range(5), repeat=len(sizes)):
        if 0 < sum(counts) <= 6:
            totals.add(round(sum(n * size for n, size in zip(counts, sizes, strict=True)), 6))
    near = sorted(t for t in totals if 0.6 * now <= t <= 1.5 * now)
    spaced = [t for t in near if t == now or min(abs(t - now), t % 50) <= 30]
    return tuple(Regimen(intakes=(Intake(form=form, hour=0.0, labelled_mg=t),)) for t in spaced)
