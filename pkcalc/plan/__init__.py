"""From an estimate to what can be given: regimens from the shelf, loads, pausing, switching, the next level.

The tool offers and the pharmacist chooses: regimens are listed by daily dose with the present one among them, and
whatever is not offered says why.
"""

from __future__ import annotations

from dataclasses import dataclass

from pkcalc.case import Case
from pkcalc.dosing import Regimen
from pkcalc.drugs.profile import Profile
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import Goal, fully_taken
from pkcalc.levels import LabScale, Observation
from pkcalc.plan import limits
from pkcalc.plan.candidates import (
    HOURS,
    Candidate,
    Setting,
    StepLimit,
    as_regimen,
    by_loss,
    candidates,
    percent,
    shown,
    with_courses,
)
from pkcalc.plan.present import (
    Today,
    doses_missed,
    first_dose_hour,
    is_present,
    present_course,
    present_rate,
    today,
)
from pkcalc.plan.shelf import (
    ShelfInUse,
    dispensable,
    into_a_vein,
    made_from,
    oral,
    part_words,
    shelf_in_use,
)
from pkcalc.record import Record
from pkcalc.site import Site
from pkcalc.units import show

__all__ = [
    "Candidate",
    "Plan",
    "Setting",
    "ShelfInUse",
    "StepLimit",
    "Today",
    "as_regimen",
    "dispensable",
    "is_present",
    "make",
    "percent",
    "present_course",
    "present_rate",
    "shelf_in_use",
]


@dataclass(frozen=True)
class Plan:
    """Everything that can be done from here.

    today: where the patient stands. every: all regimens of the shelf with the present and the pharmacist's own, by
    daily dose. table: those worth printing, with trough, peak and named days. present, own: of them. ranked: offered
    regimens by expected loss, only where asked for. lines: what must be said beside the table.
    """

    shelf: ShelfInUse
    today: Today
    every: tuple[Candidate, ...]
    table: tuple[Candidate, ...]
    present: Candidate | None
    own: tuple[Candidate, ...]
    ranked: tuple[Candidate, ...]
    step: StepLimit | None
    lines: tuple[str, ...]
    setting: Setting


def make(
    case: Case,
    profile: Profile,
    site: Site,
    *,
    estimate: Estimate,
    goal: Goal,
    scale: LabScale,
    observations: tuple[Observation, ...],
    record: Record | None = None,
    stops: frozenset[str] = frozenset(),
) -> Plan:
    """The plan from an estimate.

    record: what was given, where the estimate comes from it (today's level then follows its course). stops: what the
    cautions take away; with "regimens" among them nothing is offered, and the danger numbers still stand.
    """
    share, taken_words = doses_missed(case, profile)
    taken = fully_taken(estimate, share)
    now = today(case, estimate, observations, record)
    shelf = shelf_in_use(case, profile, site)
    rate = present_rate(case, profile)
    most = limits.largest_daily(case, profile, site)
    if most is None:
        most = 2.0 * max(rate or 0.0, estimate.summary["vmax_mg_per_day"].median)
    step = limits.step_limit(
        case,
        profile,
        site,
        now=now,
        present_mg_per_day=rate,
        central=estimate,
        taken=taken,
        goal=goal,
        scale=scale,
    )
    setting = Setting(
        profile=profile,
        site=site,
        goal=goal,
        scale=scale,
        central=estimate,
        taken=taken,
        start_mg_per_L=now.start_mg_per_L,
        draw_days=FIRST_LOOK_DAYS,
        present_mg_per_day=rate,
        largest_mg_per_day=most,
        step=step,
        raising_refused=limits.why_no_increase(case, goal, now),
        refused="A stop on the data blocks regimens." if "regimens" in stops else "",
        hours=_hours(case),
    )
    products = oral(shelf.products, profile)
    course = present_course(case)
    if course is not None and course.regimen is not None and _is_iv(course.regimen, profile):
        products = into_a_vein(shelf.products, profile)
    made = dispensable(profile, products, largest_active_mg_per_day=most, alternate_days=site.alternate_days)
    given = _given(case, profile, shelf)
    every = candidates(made, given, setting)
    forms = course.forms if course is not None else ()
    table = with_courses(shown(every, setting, forms=forms), setting)
    chosen = {id(c.regimen): c for c in table}
    every = tuple(chosen.get(id(c.regimen), c) for c in every)
    return Plan(
        shelf=shelf,
        today=now,
        every=every,
        table=tuple(c for c in table if not c.proposed),
        present=next((c for c in every if c.present and not c.proposed), None),
        own=tuple(next(c for c in every if c.regimen is r and c.proposed) for r in case.proposed),
        ranked=by_loss(every, setting) if case.file.plan.order_by_loss else (),
        step=step,
        lines=_lines(setting, shelf, share, taken_words),
        setting=setting,
    )


#: A change of dose shows little before this; the first draw after it is the next feasible one.
FIRST_LOOK_DAYS = 3.0


def _is_iv(regimen: Regimen, profile: Profile) -> bool:
    return all(profile.forms[x.form].route == "intravenous" for x in regimen.intakes)


def _given(case: Case, profile: Profile, shelf: ShelfInUse) -> list[tuple[Regimen, str, str, bool, bool]]:
    """The present regimen and the pharmacist's own, in words, with how they can be made from the shelf."""
    found = []
    course = present_course(case)
    if course is not None and course.regimen is not None:
        found.append((course.regimen, *_words(course.regimen, profile, shelf), True, False))
    for regimen in case.proposed:
        found.append((regimen, *_words(regimen, profile, shelf), is_present(regimen, case, profile), True))
    return found


def _words(regimen: Regimen, profile: Profile, shelf: ShelfInUse) -> tuple[str, str]:
    parts = []
    for intake in regimen.intakes:
        made = made_from(intake.labelled_mg, intake.form, shelf.products, profile)
        if made is None:
            return regimen.words(profile), ""
        parts.append(" and ".join(part_words(p, profile) for p in made))
    same = len(set(parts)) == 1
    times = regimen.interval_words() if same and not regimen.by_clock else "daily"
    return regimen.words(
        profile
    ), f"{parts[0] if same and len(parts) == 1 else ', then '.join(parts)} {times}"


def _hours(case: Case) -> dict[int, tuple[float, ...]]:
    """Clock times for one to four doses a day: those of the present regimen where they are stated."""
    hours = dict(HOURS)
    course = present_course(case)
    if course is not None and course.regimen is not None and course.regimen.by_clock:
        stated = tuple(sorted({x.hour for x in course.regimen.intakes}))
        if len(stated) in hours:
            hours[len(stated)] = stated
    last = first_dose_hour(case)
    if last is not None:
        hours[1] = (last,)
    return hours


def _lines(setting: Setting, shelf: ShelfInUse, share: float, taken_words: str) -> tuple[str, ...]:
    lines = list(shelf.sentences)
    if share:
        lines.append(
            f"Two lines: the central forecast carries the past intake on ({taken_words}; {percent(share)} of doses "
            "taken to differ from the record); the chance of too high and every stop hold for every dose taken."
        )
    else:
        lines.append("Every dose is taken as recorded, now and in the past, so both lines are the same.")
    if setting.step is not None:
        s = setting.step
        level = s.forecast.steady.median
        to = f"{show(level, 'mg/L')}" if level != float("inf") else "no steady state"
        lines.append(
            f"Largest step: {show(s.step_mg_per_day, 'mg/day')} of active drug ({s.words}), an upper bound, not advice. "
            f"In this patient it would lead to {to} (median, every dose taken), with a chance of "
            f"{percent(s.forecast.above_critical)} above {show(setting.goal.critical_mg_per_L, 'mg/L')} or of no "
            "steady state."
        )
    if setting.raising_refused:
        lines.append(setting.raising_refused)
    if setting.central.volume_L is None:
        lines.append("Without a weight there is no volume, so no times, no course and no loads.")
    return tuple(lines)
