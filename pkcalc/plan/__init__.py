"""From an estimate to what can be given: regimens from the shelf, loads, pausing, switching, the next level.

The tool offers and the pharmacist chooses: regimens are listed by daily dose with the present one among them, and
whatever is not offered says why.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import timedelta

from pkcalc.case import Case
from pkcalc.dosing import Regimen
from pkcalc.drugs.profile import Prior, Profile
from pkcalc.estimate.posterior import BEFORE_ANY_LEVEL, WHOLE_RECORD
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import Goal, two_lines
from pkcalc.levels import LabScale, Observation, total_spread
from pkcalc.plan import limits, loading, nextlevel, pausing, switching
from pkcalc.plan import overlay as overlaying
from pkcalc.plan.candidates import (
    HOURS,
    Candidate,
    Setting,
    StepLimit,
    as_regimen,
    by_loss,
    candidates,
    shown,
)
from pkcalc.plan.courses import with_courses
from pkcalc.plan.present import (
    History,
    Today,
    clocked,
    doses_missed,
    first_dose_hour,
    is_present,
    large_words,
    latest_level,
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
from pkcalc.site import DAYS, Site
from pkcalc.units import percent, show, show_up_to

__all__ = [
    "Candidate",
    "History",
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
    daily dose. table: those worth printing. present, own: of them. ranked: offered
    regimens by expected loss, only where asked for. lines: what must be said beside the table. no_load, no_next_level:
    why there is none. overlay: the present regimen and the pharmacist's own laid over each other.
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
    loads: tuple[loading.Load, ...]
    no_load: tuple[str, ...]
    pause: pausing.Pause | None
    switches: tuple[switching.Switch, ...]
    next_level: nextlevel.NextLevel | None
    no_next_level: str
    overlay: overlaying.Overlay | None
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
    history: History | None = None,
    stops: frozenset[str] = frozenset(),
    prior: Prior | None = None,
) -> Plan:
    """The plan from an estimate.

    history: the record with its levels, where the estimate comes from them (today's level then follows its course).
    stops: what the cautions take away; with "regimens" among them nothing is offered, and the danger numbers stand.
    """
    share, taken_words = doses_missed(case, profile)
    lines = two_lines(estimate, share, counted=estimate.method in (WHOLE_RECORD, BEFORE_ANY_LEVEL))
    central, taken = lines.central, lines.taken
    now = today(case, profile, taken, observations, history)
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
        central=central,
        taken=taken,
        goal=goal,
        scale=scale,
    )
    setting = Setting(
        profile=profile,
        site=site,
        goal=goal,
        scale=scale,
        central=central,
        taken=taken,
        start_mg_per_L=now.start_mg_per_L,
        draw_days=_first_look(now, site),
        present_mg_per_day=rate,
        largest_mg_per_day=most,
        step=step,
        raising_refused=limits.why_no_increase(case, goal, now),
        refused="A stop on the data blocks regimens." if "regimens" in stops else "",
        made_here=bool(shelf.products),
        hours=_hours(case),
    )
    products = oral(shelf.products, profile)
    course = present_course(case)
    if course is not None and course.regimen is not None and _is_iv(course.regimen, profile):
        products = into_a_vein(shelf.products, profile)
    made = dispensable(profile, products, largest_active_mg_per_day=most, alternate_days=site.alternate_days)
    given = _given(case, profile, shelf)
    every = with_courses(candidates(made, given, setting), setting)
    forms = course.forms if course is not None else tuple({x.form for r in case.proposed for x in r.intakes})
    table = shown(every, setting, forms=forms)
    present = next((c for c in every if c.present and not c.proposed), None)
    own = tuple(next(c for c in every if c.regimen is r and c.proposed) for r in case.proposed)
    next_on = own[0] if own else present
    given_loads, no_load = _loads(case, setting, now, shelf, _follows(own, present), stops, prior)
    asked = _asked(case, setting, now, observations, next_on, present, given_loads)
    level = None if asked is None or "next level" in stops else nextlevel.next_level(asked)
    return Plan(
        shelf=shelf,
        today=now,
        every=every,
        table=tuple(c for c in table if not c.proposed),
        present=present,
        own=own,
        ranked=by_loss(every, setting) if case.file.plan.order_by_loss else (),
        step=step,
        lines=_lines(setting, shelf, share, taken_words, high=limits.is_high(now, goal)),
        loads=given_loads,
        no_load=no_load,
        pause=pausing.pause(case, now, setting, every),
        switches=() if setting.refused else switching.switches(case, setting, shelf.products),
        next_level=level,
        no_next_level="" if level is not None else _why_no_next_level(setting, asked, stops),
        overlay=overlaying.overlay(_laid_over(own, present), setting),
        setting=setting,
    )


def _follows(own: tuple[Candidate, ...], present: Candidate | None) -> Candidate | None:
    """What is given after a load: the pharmacist's first that may be offered, else the present one, else the first."""
    named = [*own, *([present] if present is not None else [])]
    return next((c for c in named if c.offered), named[0] if named else None)


def _loads(
    case: Case,
    setting: Setting,
    now: Today,
    shelf: ShelfInUse,
    follows: Candidate | None,
    stops: frozenset[str],
    prior: Prior | None,
) -> tuple[tuple[loading.Load, ...], tuple[str, ...]]:
    if "loading" in stops:
        return (), ("A stop on the data blocks loads.",) if case.file.plan.load else ()
    ward = loading.Ward(
        case=case,
        profile=setting.profile,
        site=setting.site,
        estimate=setting.taken,
        goal=setting.goal,
        now=now,
        products=shelf.products,
        maintenance_mg_per_day=follows.rate_mg_per_day if follows is not None else 0.0,
        maintenance_words=_maintenance_words(follows),
        volume_words=_volume_words(case, setting, prior),
    )
    return loading.loads(ward)


def _laid_over(own: tuple[Candidate, ...], present: Candidate | None) -> list[Candidate]:
    """The present regimen and the pharmacist's own, those of one daily dose once."""
    found: list[Candidate] = []
    for c in (*([present] if present is not None else []), *own):
        if all(abs(c.rate_mg_per_day - x.rate_mg_per_day) > 1e-6 * c.rate_mg_per_day for x in found):
            found.append(c)
    return found[: overlaying.MOST]


def _maintenance_words(follows: Candidate | None) -> str:
    if follows is None:
        return "no maintenance dose"
    return follows.words if follows.offered else f"{follows.words} (NOT OFFERED)"


def _volume_words(case: Case, setting: Setting, prior: Prior | None) -> str:
    """Which weight the volume counts, where that is not the actual one; "" elsewhere."""
    weight, volume = case.patient.weight_kg, setting.taken.summary.get("volume_L")
    if prior is None or weight is None or volume is None:
        return ""
    counted = prior.volume_L / setting.profile.populations[prior.population].volume_L_per_kg
    if abs(counted / weight - 1) < 0.005:
        return ""
    why = (
        "in obesity the drug spreads into the excess weight more than in proportion, so the load per kg of actual "
        "weight is higher; the ceiling per kg still counts actual weight"
        if counted > weight
        else "without height and sex nobody can tell obesity, so the weight is capped"
    )
    return (
        f"The volume ({show(volume.median, 'L')}) counts {show(counted, 'kg')} for an actual weight of "
        f"{show(weight, 'kg')}: {why}."
    )


def _asked(
    case: Case,
    setting: Setting,
    now: Today,
    observations: tuple[Observation, ...],
    next_on: Candidate | None,
    present: Candidate | None,
    loads: tuple[loading.Load, ...],
) -> nextlevel.Asked | None:
    """The regimen whose next level is planned: the chosen one, else the pharmacist's first, else the present.

    An own one that is only proposed and not offered gives way to the present one where that may go on.
    """
    on, notes = next_on, []
    if case.chosen is not None:
        is_now = is_present(case.chosen, case, setting.profile)
        own = (case.chosen, case.chosen.words(setting.profile), "", is_now, True)
        on = candidates([], [own], replace(setting, made_here=False))[0]
    elif on is not None and not on.offered and present is not None and present.offered and on is not present:
        notes.append(f"{on.words} is not offered, so the next level is planned for the present {present.words}.")
        on = present
    if on is None:
        return None
    notes += [large_words(x, setting.profile) for x in now.large]
    used = [o for o in observations if o.usable]
    free = [o for o in used if o.level.kind == "free"]
    latest = latest_level(free or used)
    noise = latest.log_sd if latest is not None else total_spread(case, setting.profile, setting.site).log_sd
    timed, known = clocked(on.regimen, case)
    load = next((x for x in loads if x.offered), None)
    if loads and load is None:
        notes.append("The load is not offered, so it is not counted in.")
    at = case.load_at or now.moment
    begins = (at - now.moment) / timedelta(days=1) if at is not None and now.moment is not None else 0.0
    return nextlevel.Asked(
        regimen=timed,
        clock_known=known,
        words=on.regimen.words(setting.profile),
        estimate=setting.central,
        taken=setting.taken,
        now=now,
        goal=setting.goal,
        scale=setting.scale,
        profile=setting.profile,
        site=setting.site,
        noise_log_sd=noise,
        free=bool(free),
        refused="" if on.offered else " ".join(on.why_not),
        until_mg_per_L=case.restart_level_mg_per_L,
        load_asked=loading.given_doses(load, setting.profile, begins) if load is not None else (),
        notes=tuple(notes),
    )


def _why_no_next_level(setting: Setting, asked: nextlevel.Asked | None, stops: frozenset[str]) -> str:
    if "next level" in stops:
        return "A stop blocks the next level."
    if setting.central.volume_L is None:
        return "No day can be named for the next level without a weight: there is no volume."
    if asked is None:
        return "No regimen is given, chosen or proposed, so no next level can be planned."
    return "No draw day of the laboratory falls within the next two weeks."


#: A change of dose shows little before this; the first draw after it is the next feasible one.
FIRST_LOOK_DAYS = 3.0


def _first_look(now: Today, site: Site) -> float:
    """Days until the next feasible draw: the laboratory's first draw day from the third day on."""
    if now.moment is None or not site.draw_days:
        return FIRST_LOOK_DAYS
    ahead = (FIRST_LOOK_DAYS + k for k in range(7))
    return next(d for d in ahead if DAYS[(now.moment + timedelta(days=d)).weekday()] in site.draw_days)


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
    return regimen.words(profile), f"{parts[0] if same and len(parts) == 1 else ', then '.join(parts)} {times}"


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


def _lines(
    setting: Setting, shelf: ShelfInUse, share: float, taken_words: str, *, high: bool = False
) -> tuple[str, ...]:
    """high: the level today is above the target, so that no step up is told."""
    lines = list(shelf.sentences)
    if setting.central.method == BEFORE_ANY_LEVEL:
        lines.append(
            "No level yet: every number here comes from the population alone and may be far off in one patient. "
            "Take it as a start, and measure early."
        )
    if share:
        lines.append(
            f"Two lines: the central forecast carries the past intake on ({taken_words}; {percent(share)} of doses "
            "taken to differ from the record); the chance of too high and every stop hold for every dose taken."
        )
    else:
        lines.append("Every dose is taken as recorded, now and in the past, so both lines are the same.")
    if setting.step is not None and not high:
        s = setting.step
        level = s.forecast.steady.median
        told = setting.profile.target.most_told(setting.goal.critical_mg_per_L)
        to = show_up_to(level, "mg/L", told) if level != float("inf") else "no steady state"
        lines.append(
            f"Largest step: {show(s.step_mg_per_day, 'mg/day')} of active drug ({s.words}), an upper bound, not "
            f"advice. In this patient it would lead to {to} (median, every dose taken), with a chance of "
            f"{percent(s.forecast.above_critical)} above {show(setting.goal.critical_mg_per_L, 'mg/L')} or of no "
            "steady state."
        )
    if setting.raising_refused:
        lines.append(setting.raising_refused)
    if setting.central.volume_L is None:
        lines.append("Without a weight there is no volume, so no times, no course and no loads.")
    return tuple(lines)
