"""The teaching pictures of a demonstration case: for residents, never for a patient."""

from __future__ import annotations

from dataclasses import dataclass

import altair as alt

from pkcalc.consult import Consult
from pkcalc.errors import CannotEstimate, CaseError
from pkcalc.estimate import lines
from pkcalc.estimate.events import Patient, clinic_events
from pkcalc.estimate.teaching import BANNER, Picture, pictures
from pkcalc.note.charts import BLACK, BLUE, GREY, ORANGE, RED, Chart, finish
from pkcalc.note.words import Section, told_up_to

#: How each layer of a picture is drawn: mark, colour, width or size, dash.
_LOOK = {
    "repeat": ("line", GREY, 0.6, [1, 0]),
    "line": ("line", BLACK, 1.2, [1, 0]),
    "fit": ("line", BLUE, 2.0, [1, 0]),
    "crossing": ("point", ORANGE, 50, [1, 0]),
    "pair": ("point", RED, 70, [1, 0]),
    "reading": ("point", BLACK, 90, [1, 0]),
}


@dataclass(frozen=True)
class Lesson:
    """Banner, the five pictures and the clinic events in words."""

    banner: str
    charts: tuple[Chart, ...]
    events: tuple[Section, ...]


def lesson(consult: Consult) -> Lesson | None:
    """The lesson of a demonstration case with three or more steady levels; None for anything else."""
    case = consult.case
    if case.demonstration is None or len(consult.pairs) < lines.FEWEST:
        return None
    try:
        found = pictures(lines.gather(consult.pairs))
    except (CannotEstimate, CaseError):
        return None
    return Lesson(BANNER, tuple(picture_chart(p, consult) for p in found), _events(consult))


def picture_chart(picture: Picture, consult: Consult) -> Chart:
    """One teaching picture as a chart."""
    layers = []
    rows = picture.rows()
    xs = [float(str(r["x"])) for r in rows if r["layer"] != "repeat"]
    ys = [float(str(r["y"])) for r in rows if r["layer"] != "repeat"]
    x_low, x_high = min([0.0, *xs]), max([0.0, *xs])
    y_low, y_high = min([0.0, *ys]), max([0.0, *ys])
    x = alt.X(
        "x:Q",
        title=f"{picture.x.words} ({picture.x.unit})",
        scale=alt.Scale(domain=[x_low, x_high], clamp=False, nice=True),
        axis=alt.Axis(format=",~r"),
    )
    y = alt.Y(
        "y:Q",
        title=f"{picture.y.words} ({picture.y.unit})",
        scale=alt.Scale(domain=[y_low, 1.05 * y_high], nice=True),
        axis=alt.Axis(format=",~r"),
    )
    for layer, (mark, colour, size, dash) in _LOOK.items():
        mine = [r for r in rows if r["layer"] == layer]
        if not mine:
            continue
        base = alt.Chart(alt.InlineData(mine))
        single = {r["name"] for r in mine if sum(q["name"] == r["name"] for q in mine) == 1}
        joined = [r for r in mine if r["name"] not in single]
        if joined:
            layers.append(
                alt.Chart(alt.InlineData(joined))
                .mark_line(color=colour, strokeWidth=size if mark == "line" else 1.2, strokeDash=dash, clip=True)
                .encode(x=x, y=y, detail="name:N", order="order:Q")
            )
        if single:
            shape = {"reading": "diamond", "crossing": "circle", "repeat": "circle"}.get(layer, "square")
            layers.append(
                base.transform_filter(alt.FieldOneOfPredicate(field="name", oneOf=sorted(map(str, single))))
                .mark_point(
                    shape=shape,
                    filled=True,
                    color=colour,
                    size=14 if layer == "repeat" else size if mark == "point" else 40,
                    opacity=1,
                    clip=True,
                )
                .encode(x=x, y=y)
            )
    text = f"{picture.how_read} {picture.reading} {picture.repeats}".strip()
    return finish(
        f"teaching {picture.name}",
        f"{picture.name[0].upper()}{picture.name[1:]}",
        text,
        layers,
        consult.case,
        height=210,
    )


def _events(consult: Consult) -> tuple[Section, ...]:
    estimate = consult.chosen
    rate = consult.pairs[-1].rate_mg_per_day
    if estimate is None or estimate.volume_L is None:
        return ()
    patient = Patient(
        vmax_mg_per_day=estimate.point.vmax_mg_per_day,
        km_mg_per_L=estimate.point.km_mg_per_L,
        dose_rate_mg_per_day=rate,
        aim_mg_per_L=consult.goal.aim_mg_per_L,
        volume_L=estimate.summary["volume_L"].median,
        told_up_to_mg_per_L=told_up_to(consult),
    )
    return tuple(
        Section(
            f"{e.name[0].upper()}{e.name[1:]}",
            (e.story, e.text, *(f"{name[0].upper()}{name[1:]}: {words}" for name, words in e.movement.items())),
        )
        for e in clinic_events(patient)
    )
