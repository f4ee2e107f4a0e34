"""Upper bounds of a maintenance dose: largest step, largest daily dose, no increase while adherence is in doubt."""

from __future__ import annotations

from pkcalc.case import Case
from pkcalc.drugs.profile import Profile
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import Goal, forecast_rate
from pkcalc.levels import LabScale
from pkcalc.plan.candidates import StepLimit
from pkcalc.plan.present import FRESH, Today, adherence_in_doubt
from pkcalc.site import Site
from pkcalc.units import show


def is_child(case: Case, profile: Profile) -> bool:
    """Younger than the adults the drug file describes; an age that is not stated counts as adult."""
    age = case.patient.age_years
    return age is not None and age < profile.plausible_at(None).ages_years[0]


def largest_daily(case: Case, profile: Profile, site: Site) -> float | None:
    """The largest daily dose of active drug [mg/day]: the site's, else the published one; None where there is none."""
    limits = profile.limits
    if limits is None:
        return None
    labelled = site.largest_daily_mg_per_day or limits.largest_mg_per_day
    if is_child(case, profile) and limits.largest_child_mg_per_day is not None:
        labelled = min(labelled, limits.largest_child_mg_per_day)
    return labelled * profile.forms[limits.step_form].active_fraction


def step_limit(
    case: Case,
    profile: Profile,
    site: Site,
    *,
    now: Today,
    present_mg_per_day: float | None,
    central: Estimate,
    taken: Estimate,
    goal: Goal,
    scale: LabScale,
) -> StepLimit | None:
    """The largest step up from the present dose, and what it would give in this patient, every dose taken.

    The published rule by present level is an upper bound; the site's own step replaces it, and a step asked for in
    the case can only lower it. The rule looks at the higher of today's level and the plateau the present dose leads
    to, so that a level still on its way up does not allow too much. None without a rule, a level or a present dose.
    """
    limits = profile.limits
    level = now.level
    if limits is None or present_mg_per_day is None or level is None:
        return None
    plateau = forecast_rate(taken, present_mg_per_day, goal, scale).steady.median
    judged = max(level.median, now.measured_mg_per_L or 0.0, plateau)
    form = profile.forms[limits.step_form]
    rule = limits.largest_step(judged)
    words = f"published step rule: {show(rule, form.amount_unit + '/day')} of {form.words} at " + (
        f"a level of {show(judged, 'mg/L')}" if judged != float("inf") else "a level that does not settle"
    )
    step = rule
    if site.largest_step_mg_per_day is not None:
        step = site.largest_step_mg_per_day
        words = f"local setting, {site.file}: {show(step, form.amount_unit + '/day')} of {form.words}"
    if case.largest_step_mg_per_day is not None and case.largest_step_mg_per_day < step:
        step = case.largest_step_mg_per_day
        words = f"asked for in the case: {show(step, form.amount_unit + '/day')} of {form.words}"
    active = step * form.active_fraction
    forecast = forecast_rate(taken, present_mg_per_day + active, goal, scale, present_mg_per_L=now.start_mg_per_L)
    return StepLimit(active, judged, words, forecast)


def is_high(now: Today, goal: Goal) -> bool:
    """True where today's level is above the target: by the record, or by a level drawn within a day."""
    if now.level is not None and now.level.median > goal.high_mg_per_L:
        return True
    if now.measured_mg_per_L is None or now.measured_at is None or now.moment is None:
        return False
    return now.measured_mg_per_L > goal.high_mg_per_L and now.moment - now.measured_at <= FRESH


def why_no_increase(case: Case, goal: Goal, now: Today) -> str:
    """Why the dose must not be raised now; "" where it may be."""
    if is_high(now, goal):
        return f"The level today is above {show(goal.high_mg_per_L, 'mg/L')}, the top of the target: no increase."
    low = now.measured_mg_per_L is not None and now.measured_mg_per_L < goal.low_mg_per_L
    if low and adherence_in_doubt(case):
        answer = case.answer("adherence_doubtful")
        doubt = (
            "whether the doses were taken is in doubt"
            if answer == "yes"
            else "whether the doses were taken is not stated"
        )
        return (
            f"The level is below {show(goal.low_mg_per_L, 'mg/L')} and {doubt}: observe dosing and measure again "
            "before raising the dose."
        )
    return ""
