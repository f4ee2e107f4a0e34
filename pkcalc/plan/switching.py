"""Another form or route at the same amount of active drug."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from pkcalc.case import Case
from pkcalc.drugs.profile import Form, Profile
from pkcalc.estimate.result import Band
from pkcalc.forecast import forecast_rate
from pkcalc.plan.candidates import Setting, as_regimen, candidates
from pkcalc.plan.present import present_course
from pkcalc.plan.shelf import TUBE, Dispensable, dispensable, dispense_words
from pkcalc.units import show, show_number

#: How far the nearest regimen of another form may lie from the present active amount to be shown.
NEAR = 0.10


@dataclass(frozen=True)
class Switch:
    """The nearest regimen of another form.

    exact_labelled_mg: labelled mg/day that would be equal. change_percent: of the active amount as dispensed.
    steady: on the central line; steady_low, steady_high: median at the two ends of how much of the form reaches the
    body. lines: concentration, salt and tube in words. offered, why_not: as for every regimen: another form at the
    amount that is too much now is too much as well.
    """

    form: str
    words: str
    exact_labelled_mg: float
    active_mg_per_day: float
    change_percent: float
    steady: Band
    steady_low_mg_per_L: float
    steady_high_mg_per_L: float
    lines: tuple[str, ...]
    offered: bool = True
    why_not: tuple[str, ...] = ()

    @property
    def marks(self) -> tuple[str, ...]:
        return () if self.offered else ("NOT OFFERED",)


def switches(case: Case, setting: Setting, products: Sequence[str]) -> tuple[Switch, ...]:
    """For every other form of the shelf, the regimen nearest to the present active amount.

    Not above it where more of the new form may reach the body, as from mouth to vein.
    """
    course = present_course(case)
    now = setting.present_mg_per_day
    if course is None or course.regimen is None or now is None:
        return ()
    profile = setting.profile
    found = []
    for form in dict.fromkeys(profile.products[p].form for p in products):
        if form in course.forms and len(course.forms) == 1:
            continue
        mine = [p for p in products if profile.products[p].form == form]
        made = dispensable(profile, mine, largest_active_mg_per_day=now * (1 + NEAR))
        if _shares(profile.forms[form], [profile.forms[f] for f in course.forms])[1] > 1 + 1e-9:
            # more of the new form may arrive than the estimate takes: rounded up it would come on top of that
            made = tuple(m for m in made if m.active_mg_per_day <= now * (1 + 1e-9))
        if made:
            nearest = min(made, key=lambda m: abs(m.active_mg_per_day - now))
            if abs(nearest.active_mg_per_day - now) <= NEAR * now:
                found.append(_switch(nearest, form, course.forms, now, setting))
    return tuple(found)


def _switch(made: Dispensable, form_id: str, from_forms: Sequence[str], now: float, setting: Setting) -> Switch:
    profile, form = setting.profile, setting.profile.forms[form_id]
    forecast = forecast_rate(setting.central, made.active_mg_per_day, setting.goal, setting.scale)
    ends = [
        forecast_rate(setting.central, made.active_mg_per_day * share, setting.goal, setting.scale).steady.median
        for share in _shares(form, [profile.forms[f] for f in from_forms])
    ]
    words = dispense_words(made, profile)
    row = (as_regimen(made, profile, setting.hours), words, words, False, False)
    judged = candidates([], [row], setting)[0]
    change = 100.0 * (made.active_mg_per_day / now - 1.0)
    return Switch(
        form=form_id,
        words=words,
        exact_labelled_mg=now / form.active_fraction,
        active_mg_per_day=made.active_mg_per_day,
        change_percent=change,
        steady=forecast.steady,
        steady_low_mg_per_L=ends[0],
        steady_high_mg_per_L=ends[1],
        lines=_lines(made, form_id, from_forms, profile),
        offered=judged.offered,
        why_not=judged.why_not,
    )


def _shares(form: Form, before: Sequence[Form]) -> tuple[float, float]:
    """How much of the new form may reach the body, of what the estimate takes for it: least and most.

    The estimate takes the present form at its nominal share. Where the route changes, the share of the present form is
    uncertain too: what less of it was absorbed comes on top when the new one is absorbed whole.
    """
    low, high = (share / form.bioavailability for share in form.bioavailability_range)
    other = [f for f in before if f.route != form.route]
    if not other:
        return low, high
    least = min(f.bioavailability_range[0] / f.bioavailability for f in other)
    most = max(f.bioavailability_range[1] / f.bioavailability for f in other)
    return low / most, high / least


def _lines(made: Dispensable, form_id: str, from_forms: Sequence[str], profile: Profile) -> tuple[str, ...]:
    form = profile.forms[form_id]
    lines = []
    for p in made.products:
        product = profile.products[p]
        lines.append(f"{product.words[0].upper()}{product.words[1:]}: {product.strength_words}.")
    for other in from_forms:
        before = profile.forms[other]
        if before.salt_factor != form.salt_factor:
            ratio = form.salt_factor / before.salt_factor - 1.0
            more = "more" if ratio > 0 else "less"
            lines.append(
                f"The same labelled amount of {form.words} holds {show_number(100 * abs(ratio), 2)} % {more} active "
                f"drug than of {before.words} (salt factors {show_number(form.salt_factor)} and "
                f"{show_number(before.salt_factor)})."
            )
        if before.amount_unit != form.amount_unit:
            lines.append(f"Amounts change from {before.amount_unit} to {form.amount_unit}: write the unit out.")
    low, high = form.bioavailability_range
    if low != high:
        lines.append(
            f"How much reaches the body is uncertain ({show(100 * low, '%')} to {show(100 * high, '%')}): measure "
            "again after the change."
        )
    for given in (profile.forms[f] for f in from_forms):
        least, most = given.bioavailability_range
        if given.route != form.route and least < most:
            lines.append(
                f"Of {given.words} {show(100 * least, '%')} to {show(100 * most, '%')} may have reached the body until "
                "now: the same amount of this form can give a higher level. Measure within days of the change."
            )
    if TUBE in form.routes:
        lines.append(
            "Down a feeding tube with running feeds much less may be absorbed: hold feeds around the dose, the same "
            "way every day, and measure again after any change of feeds."
        )
    return tuple(lines)
