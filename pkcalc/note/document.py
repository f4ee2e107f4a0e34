"""The consult note as a document: sections of lines and tables, independent of how it is printed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from pkcalc import __version__
from pkcalc.case import QUESTIONS
from pkcalc.cautions import percent
from pkcalc.clock import show_time
from pkcalc.consult import Consult, Shown
from pkcalc.dosing import active_mg
from pkcalc.errors import Caution
from pkcalc.estimate.result import Band, Estimate
from pkcalc.units import show, show_number

DEFERS = (
    "This note supports, and never replaces, the local protocol and the judgement of licensed pharmacists and "
    "physicians. Every number must be checked before it is used."
)
DEMONSTRATION = "DEMONSTRATION - invented, not a patient, not for clinical use"
NO_STEADY_STATE = "no steady state"


@dataclass(frozen=True)
class Table:
    """Column heads with their units, and rows of text."""

    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


@dataclass(frozen=True)
class Section:
    """A titled part of the note."""

    title: str
    lines: tuple[str, ...] = ()
    table: Table | None = None


@dataclass(frozen=True)
class Document:
    """The whole note."""

    title: str
    demonstration: str
    cautions: tuple[Caution, ...]
    sections: tuple[Section, ...]
    footer: tuple[str, ...]


def compose(consult: Consult) -> Document:
    """Consult -> note, cautions first."""
    case = consult.case
    sections = [
        _question(consult),
        _patient(consult),
        _doses(consult),
        _levels(consult),
        _estimate(consult),
        *_forecasts(consult),
        _workings(consult),
        _sources(consult),
    ]
    return Document(
        title=f"Consult note: {consult.profile.name}",
        demonstration=DEMONSTRATION if case.demonstration is not None else "",
        cautions=consult.cautions,
        sections=tuple(s for s in sections if s.lines or s.table),
        footer=(
            DEFERS,
            f"pkcalc {__version__}, results of {consult.results_date}, case {case.hash}, "
            f"drug file {consult.profile.sha256[:12]}"
            + (f", site file {consult.site.sha256[:12]}" if consult.site.sha256 else ""),
            "Prepared by: ______________________    Time: ______________",
            "Independently checked by: _________________    Time: ______________",
        ),
    )


def level_words(band: Band, unit: str = "mg/L") -> str:
    """'15 mg/L (90 % interval 11 to 24)'; a bound without a steady state is said in words."""
    if not np.isfinite(band.median):
        return NO_STEADY_STATE
    return f"{show(band.median, unit)} (90 % interval {_edge(band.low)} to {_edge(band.high)})"


def _edge(value: float) -> str:
    return show_number(value) if np.isfinite(value) else NO_STEADY_STATE


def days_words(band: Band | None) -> str:
    """Days with their interval, or why there are none."""
    if band is None:
        return "not known without a weight"
    if not np.isfinite(band.median):
        return "never settles"
    high = show_number(band.high, 2) if np.isfinite(band.high) else "never"
    return f"{show_number(band.median, 2)} days ({show_number(band.low, 2)} to {high})"


def _question(consult: Consult) -> Section:
    case = consult.case
    lines = []
    if case.demonstration is not None:
        lines.append(f"{case.demonstration.title}. What this shows: {case.demonstration.shows}")
    if case.question:
        lines.append(case.question)
    goal = consult.goal
    lines.append(
        f"Target {show_number(goal.low_mg_per_L)} to {show_number(goal.high_mg_per_L)} mg/L, aim "
        f"{show(goal.aim_mg_per_L, 'mg/L')} (total at normal binding; {goal.origin}); critical from "
        f"{show(goal.critical_mg_per_L, 'mg/L')}."
    )
    return Section("Question", tuple(lines))


def _patient(consult: Consult) -> Section:
    case, patient = consult.case, consult.case.patient
    parts = [
        f"age {patient.typed.get('age', 'not stated')}",
        f"sex {patient.sex if patient.sex != 'unknown' else 'not stated'}",
        f"weight {patient.typed.get('weight', 'not stated')}"
        + (
            f" ({patient.weight_basis})"
            if patient.weight_kg is not None and patient.weight_basis != "unknown"
            else ""
        ),
        f"height {patient.typed.get('height', 'not stated')}",
    ]
    albumin = case.albumin
    parts.append(
        f"albumin {albumin.typed.text}"
        + (f" taken {show_time(albumin.taken)}" if albumin.taken else "")
        + (f" ({albumin.method})" if albumin.method not in ("unknown", "other") else "")
        if albumin
        else "albumin not stated"
    )
    answered = [
        f"{QUESTIONS[k]} {a.answer}" + (f" ({a.detail})" if a.detail else "")
        for k, a in sorted(case.context.items(), key=lambda item: list(QUESTIONS).index(item[0]))
        if a.answer != "unknown"
    ]
    unknown = [k.replace("_", " ") for k in QUESTIONS if case.answer(k) in ("unknown", "not stated")]
    lines = ["; ".join(parts) + "."] + answered
    if unknown:
        lines.append("Not stated or unknown: " + ", ".join(unknown) + ".")
    return Section("Patient", tuple(lines))


def _doses(consult: Consult) -> Section:
    case, profile = consult.case, consult.profile
    lines = []
    for course in case.courses:
        head = f"Dose line {course.index + 1}: "
        if course.regimen is not None:
            rate = course.regimen.active_mg_per_day(profile)
            when = (
                f"for about {course.typed.for_about}"
                if course.for_about_days is not None
                else f"since {show_time(course.start)}"
                if course.start
                else "start not stated"
            )
            if course.end is not None:
                when += f" until {show_time(course.end)}"
            text = f"{course.regimen.words(profile)}, {when} = {show(rate, 'mg/day', 4)} as active drug"
            if course.missed:
                text += "; missed " + ", ".join(show_time(m) for m in course.missed)
        elif course.single is not None and course.start is not None:
            form = profile.forms[course.single.form]
            text = (
                f"{show_number(course.single.labelled_mg, 6)} {form.amount_unit} {form.words} once at "
                f"{show_time(course.start)} = {show(active_mg(course.single, profile), 'mg', 4)} as active drug"
            )
        else:
            text = f"infusion {course.typed.rate} {profile.forms[course.rate_form].words}"
        lines.append(head + text + ("" if course.counts_as_given else " (not confirmed as given; left out)"))
    return Section("What was given", tuple(lines))


def _levels(consult: Consult) -> Section:
    lines = []
    settling = {s.level: s for s in consult.settling}
    for o in consult.observations:
        level = o.level
        when = f"drawn {show_time(level.drawn)}" if level.drawn else "draw time not stated"
        text = f"{o.name}: {level.typed.text} {level.kind}, {when}"
        if not o.usable:
            text += f"; no single reading: {show_number(o.low_mg_per_L)} to {show(o.high_mg_per_L, 'mg/L')} possible"
        elif o.working_mg_per_L != level.reported_mg_per_L:
            text += f"; at normal binding {show(o.working_mg_per_L, 'mg/L')}"
        lines.append(text + ".")
        lines += [f"   {step}" for step in o.steps]
        lines += [f"   {caveat}" for caveat in o.caveats]
        if level.index in settling:
            lines.append(f"   {settling[level.index].sentence}")
    if consult.observations:
        spread = consult.observations[0].spread
        lines.append(
            f"Spread of a level taken as {show_number(100 * spread.total_cv)} % in all ({spread.basis}), of which the "
            f"assay is {show_number(100 * spread.assay_cv)} %."
        )
    return Section("What was measured", tuple(lines))


def estimate_lines(estimate: Estimate) -> list[str]:
    """Vmax and Km with their intervals, in words."""
    vmax, km = estimate.summary["vmax_mg_per_day"], estimate.summary["km_mg_per_L"]
    point = estimate.point
    lines = [
        f"Method: {estimate.method}.",
        f"Vmax {show(point.vmax_mg_per_day, 'mg/day', 4)} of active drug, Km {show(point.km_mg_per_L, 'mg/L')} "
        f"({point.kind}).",
        f"Vmax median {show(vmax.median, 'mg/day')}, 90 % interval {show_number(vmax.low)} to {show_number(vmax.high)}; "
        f"Km median {show(km.median, 'mg/L')}, 90 % interval {show_number(km.low)} to {show_number(km.high)}; "
        f"correlation {_signed(estimate.correlation)}.",
    ]
    if estimate.volume_L is not None:
        volume = estimate.summary["volume_L"]
        lines.append(
            f"Volume {show(volume.median, 'L')} (90 % interval {show_number(volume.low)} to {show_number(volume.high)}), "
            f"from the {estimate.volume_from}."
        )
    if "chance of negative Km" in estimate.diagnostics:
        chance = float(str(estimate.diagnostics["chance of negative Km"]))
        lines.append(
            f"Chance that the spread of these levels alone makes the pair impossible: {percent(chance)}; "
            f"{percent(estimate.rejected)} of the draws were left out for that reason, and the intervals are "
            "conditional on the rest."
        )
    return lines


def _signed(value: float) -> str:
    return ("minus " if value < 0 else "") + show_number(abs(value), 2)


def _estimate(consult: Consult) -> Section:
    lines: list[str] = []
    if consult.chosen is not None:
        lines += estimate_lines(consult.chosen)
        lines.append(f"Chosen: {consult.chosen_why}.")
    for method, why in consult.refusals.items():
        lines.append(f"{method[0].upper()}{method[1:]}: no estimate. {why}")
    if consult.stopped and not lines:
        lines.append("No estimate is given because of the stops above.")
    return Section("What it says about this patient", tuple(lines))


def forecast_row(shown: Shown) -> tuple[str, ...]:
    f = shown.forecast
    mark = "present" if shown.present else "" if shown.offered else "not offered"
    return (
        shown.words,
        show_number(f.rate_mg_per_day, 4),
        level_words(f.steady).replace("90 % interval ", "").replace(" mg/L", ""),
        level_words(f.total).replace("90 % interval ", "").replace(" mg/L", ""),
        percent(f.below),
        percent(f.within),
        percent(f.above),
        percent(f.above_critical),
        percent(f.no_steady_state),
        days_words(f.settle_days),
        mark,
    )


FORECAST_HEADS = (
    "Regimen",
    "Active drug (mg/day)",
    "Steady level, normal binding (mg/L)",
    "As the laboratory reports total (mg/L)",
    "Below",
    "Within",
    "Above",
    "Above critical",
    "No steady state",
    "90 % of the way",
    "",
)


def _forecasts(consult: Consult) -> list[Section]:
    sections = []
    for shown in consult.proposed:
        f = shown.forecast
        lines = [
            f"{shown.words} = {show(f.rate_mg_per_day, 'mg/day', 4)} as active drug.",
            f"Steady level {level_words(f.steady)}; {consult.scale.words}: {level_words(f.total)}.",
            f"Chance below the target {percent(f.below)}, within {percent(f.within)}, above {percent(f.above)} "
            f"(of which no steady state {percent(f.no_steady_state)}); above the critical level "
            f"{percent(f.above_critical)}.",
            f"90 % of the way from the present level: {days_words(f.settle_days)}.",
        ]
        if np.isfinite(f.percent_per_percent):
            lines.append(
                f"At this point 1 % more dose is {show_number(f.percent_per_percent, 2)} % more level."
            )
        if not shown.offered:
            lines.append("NOT OFFERED: the chance of too high is above the limit.")
        sections.append(Section("Proposed regimen", tuple(lines)))
    if consult.table:
        rows = tuple(forecast_row(s) for s in consult.table)
        sections.append(
            Section(
                "Doses around the present one",
                (
                    "Steady level: median (90 % interval). The chance columns hold against the target range. These are "
                    "forecasts of doses fully taken, with no change in other drugs, feeds or albumin.",
                ),
                Table(FORECAST_HEADS, rows),
            )
        )
    if consult.aim_rate is not None:
        rate = consult.aim_rate
        lines = [
            f"To hold {show(consult.goal.aim_mg_per_L, 'mg/L')} (normal binding): {show(rate.median, 'mg/day')} of "
            f"active drug (90 % interval {show_number(rate.low)} to {show_number(rate.high)})."
        ]
        for form_id in _forms_in_use(consult):
            form = consult.profile.forms[form_id]
            factor = form.salt_factor * form.bioavailability
            lines.append(
                f"As {form.words}: {show(rate.median / factor, form.amount_unit + '/day')} "
                f"(salt factor {show_number(form.salt_factor)})."
            )
        sections.append(Section("Dose rate for the aim", tuple(lines)))
    return sections


def _forms_in_use(consult: Consult) -> list[str]:
    return list(dict.fromkeys(f for c in consult.case.courses for f in c.forms))


def _workings(consult: Consult) -> Section:
    lines: list[str] = []
    by_level = {o.level.index: o for o in consult.observations}
    estimate = consult.chosen
    if estimate is not None and estimate.method == "two levels" and len(consult.pairs) == 2:
        low, high = sorted(consult.pairs, key=lambda p: p.rate_mg_per_day)
        for p in (low, high):
            lines.append(
                f"{by_level[p.level].name}: R = {show(p.rate_mg_per_day, 'mg/day', 6)}, C = "
                f"{show(p.level_mg_per_L, 'mg/L', 6)}, R/C = {show(p.rate_mg_per_day / p.level_mg_per_L, 'L/day', 6)}"
            )
        point = estimate.point
        lines += [
            "Km = (R2 - R1) / (R1/C1 - R2/C2) = "
            f"({show_number(high.rate_mg_per_day, 6)} - {show_number(low.rate_mg_per_day, 6)}) / "
            f"({show_number(low.rate_mg_per_day / low.level_mg_per_L, 6)} - "
            f"{show_number(high.rate_mg_per_day / high.level_mg_per_L, 6)}) = {show(point.km_mg_per_L, 'mg/L', 5)}",
            "Vmax = R1 + Km x R1/C1 = "
            f"{show_number(low.rate_mg_per_day, 6)} + {show_number(point.km_mg_per_L, 5)} x "
            f"{show_number(low.rate_mg_per_day / low.level_mg_per_L, 6)} = {show(point.vmax_mg_per_day, 'mg/day', 5)}",
        ]
    if estimate is not None:
        point = estimate.point
        for shown in consult.proposed:
            rate = shown.forecast.rate_mg_per_day
            if np.isfinite(shown.forecast.point_mg_per_L):
                lines.append(
                    "Css = Km x R / (Vmax - R) = "
                    f"{show_number(point.km_mg_per_L, 5)} x {show_number(rate, 5)} / "
                    f"({show_number(point.vmax_mg_per_day, 5)} - {show_number(rate, 5)}) = "
                    f"{show(shown.forecast.point_mg_per_L, 'mg/L')} (at the closed-form Vmax and Km, not the median level)"
                )
            else:
                lines.append(
                    f"R = {show(rate, 'mg/day', 5)} is not below Vmax = {show(point.vmax_mg_per_day, 'mg/day', 5)}: "
                    "no steady state."
                )
    return Section("Workings", tuple(lines))


def _sources(consult: Consult) -> Section:
    return Section("Sources used", tuple(sources_used(consult.cautions, consult)))


def sources_used(cautions: Sequence[Caution], consult: Consult) -> list[str]:
    from pkcalc.sources import source

    keys = ["michaelis1913", "ludden1977"]
    if consult.prior is not None:
        keys += consult.prior.sources
    keys += [c.source for c in cautions]
    return [source(key).citation for key in dict.fromkeys(keys)]
