"""Follow-up: the levels a note forecasts are kept with the case, and what came later is laid beside them."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Literal

from pkcalc import __version__
from pkcalc.case import CaseFile, EarlierForecast, EarlierForecastFile, Kind, check_case
from pkcalc.clock import show_time
from pkcalc.consult import Consult
from pkcalc.errors import CaseError, Problem
from pkcalc.estimate.result import Band
from pkcalc.levels import Observation
from pkcalc.note.words import Section, Table, short_band
from pkcalc.units import show, show_number

#: A forecast stands for levels drawn within this of its time: half of the spacing of the draws.
NEAR = {"day": timedelta(hours=12), "h": timedelta(minutes=30)}
#: More than this are not kept; the earliest go.
MOST_KEPT = 500

Verdict = Literal["inside", "above", "below", "cannot be told"]


@dataclass(frozen=True)
class Row:
    """A level that came, and what was forecast for its time."""

    then: EarlierForecast
    came: Observation
    value_mg_per_L: float
    verdict: Verdict

    @property
    def came_words(self) -> str:
        sign = {"below": "below ", "above": "above ", None: ""}[self.came.censored]
        return f"{sign}{show_number(self.value_mg_per_L)}"


def with_forecasts(consult: Consult) -> CaseFile:
    """The case with the forecasts of its note, for a later look at what came.

    Raises CaseError where the note forecasts no level that could be drawn.
    """
    new = tuple(_forecasts(consult))
    if not new:
        given = "this note forecasts no level with a time"
        fix = "Look at its stops; without clock times or a weight nothing can be forecast for a time"
        raise CaseError(Problem("Follow-up", given, "a note with a next level", fix))
    known = {(x.drawn, x.kind, x.regimen) for x in new}
    old = tuple(x for x in consult.case.file.forecast_then if (x.drawn, x.kind, x.regimen) not in known)
    file = consult.case.file.model_copy(update={"forecast_then": (*old, *new)[-MOST_KEPT:]})
    check_case(file)
    return file


def _forecasts(consult: Consult) -> Iterator[EarlierForecastFile]:
    plan, projection = consult.plan, consult.projection
    if consult.stopped:
        return
    if projection is not None:
        for path in projection.paths:
            for m in path.moments:
                yield _kept(m.at, "total", m.level, path.words)
    elif plan is not None and plan.next_level is not None:
        found = plan.next_level
        for draw in found.draws:
            if draw.moment is not None:
                yield _kept(draw.moment, found.line.scale, draw.reported, found.regimen_words)


def _kept(at: datetime, kind: Kind, band: Band, regimen: str) -> EarlierForecastFile:
    # a case file takes no thousands mark
    low, median, high = (show(x, "mg/L").replace(",", "") for x in (band.low, band.median, band.high))
    return EarlierForecastFile(
        drawn=at.isoformat(" ", "minutes"),
        kind=kind,
        median=median,
        low=low,
        high=high,
        regimen=regimen[:200],
        version=__version__,
    )


def follow_up(consult: Consult) -> tuple[Row, ...]:
    """Every level for whose time an earlier note holds a forecast, in the order of the levels."""
    near = NEAR[consult.profile.time_unit]
    rows: list[Row] = []
    for o in consult.observations:
        drawn = o.level.drawn
        if drawn is None:
            continue
        best: dict[tuple[str, str], EarlierForecast] = {}
        for then in consult.case.earlier:
            fits = then.kind in (o.level.kind, "normalised") and abs(then.drawn - drawn) <= near
            key = (then.kind, then.regimen)
            if fits and (key not in best or abs(then.drawn - drawn) < abs(best[key].drawn - drawn)):
                best[key] = then
        for then in best.values():
            value = o.working_mg_per_L if then.kind == "normalised" else o.level.reported_mg_per_L
            rows.append(Row(then, o, value, _verdict(then, value, o.censored)))
    return tuple(rows)


def _verdict(then: EarlierForecast, value: float, censored: str | None) -> Verdict:
    if censored == "below":
        return "below" if value <= then.low_mg_per_L else "cannot be told"
    if censored == "above":
        return "above" if value >= then.high_mg_per_L else "cannot be told"
    if then.low_mg_per_L <= value <= then.high_mg_per_L:
        return "inside"
    return "above" if value > then.high_mg_per_L else "below"


def follow_up_sentence(consult: Consult, o: Observation) -> str:
    """For page one: where a level lies against what was forecast for it; empty where nothing was."""
    found = [r for r in follow_up(consult) if r.came is o]
    if not found:
        return ""
    then, verdict = found[-1].then, found[-1].verdict
    band = short_band(Band(then.median_mg_per_L, then.low_mg_per_L, then.high_mg_per_L))
    place = {
        "inside": "it lies inside",
        "above": "it lies above",
        "below": "it lies below",
        "cannot be told": "nobody can tell whether it lies inside",
    }[verdict]
    given = f" on {then.regimen}" if then.regimen else ""
    return f"An earlier note forecast {band} mg/L {then.kind} for it{given}: {place} that interval."


def follow_up_section(consult: Consult) -> list[Section]:
    """What an earlier note forecast, beside what came; nothing where the case holds no forecast."""
    case = consult.case
    if not case.earlier:
        return []
    rows = follow_up(consult)
    regimens = dict.fromkeys(x.regimen or "a regimen that is not stated" for x in case.earlier)
    lines = [
        f"Forecast for {'; '.join(regimens)}. It tells nothing where something else was given.",
        f"Levels inside their 90 % interval: {sum(r.verdict == 'inside' for r in rows)} of {len(rows)}."
        if rows
        else "No level of this case was drawn near a time for which one was forecast.",
    ]
    heads = ("Level", "Drawn", "Forecast for", "Kind", "Forecast then (mg/L)", "Came (mg/L)", "Its 90 % interval")
    cells = tuple(
        (
            r.came.name,
            show_time(r.came.level.drawn) if r.came.level.drawn is not None else "",
            show_time(r.then.drawn) + (f", {r.then.regimen}" if len(regimens) > 1 and r.then.regimen else ""),
            r.then.kind,
            short_band(Band(r.then.median_mg_per_L, r.then.low_mg_per_L, r.then.high_mg_per_L)),
            r.came_words,
            r.verdict,
        )
        for r in rows
    )
    return [Section("What was forecast then, and what came", tuple(lines), Table(heads, cells) if cells else None)]
