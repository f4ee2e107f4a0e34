"""The report of a back-test: one set of findings as JSON, HTML, a list of what was left out, and a few lines.

Nothing in it depends on how or how fast the run was made, so equal runs give equal files."""

from __future__ import annotations

import base64
import csv
import json
import re
from collections.abc import Iterable, Sequence
from importlib import resources
from itertools import islice
from pathlib import Path
from typing import Any

from pkcalc.backtest.accuracy import (
    ABSOLUTE,
    DIFFERENCE,
    ERROR,
    FEWEST_PATIENTS,
    HIGHER,
    IN20,
    IN30,
    IN50,
    IN90,
    NEARER,
    SQUARE,
    Bands,
    Findings,
    Share,
    Sums,
    Tally,
    gather,
)
from pkcalc.backtest.folder import Folder
from pkcalc.backtest.hint import Hint, refit
from pkcalc.backtest.outlook import LEFT_OUT, METHODS, NO_FORECAST, PRIOR, SET_ASIDE, TWO, WHOLE, Row
from pkcalc.backtest.parts import Store
from pkcalc.drugs.profile import load_profile
from pkcalc.note.data import dumps
from pkcalc.site import Site

VERSION = 1
LIST_SHOWN = 100
PRIVACY = (
    "This report and the parts beside it hold your department's own keys and levels: keep them as you keep the records."
)
READING = (
    "Levels are on the working basis (total at normal binding, mg/L). Error is forecast minus what came; within 20 % "
    "and 30 % are of what came. Intervals in brackets are 95 % intervals that count patients, not levels; figures of "
    f"fewer than {FEWEST_PATIENTS} patients stand without one."
)
CAVEATS = (
    "A forecast is a median: half of the levels should come higher. As levels spread further upwards than downwards, "
    "the mean error of sound forecasts lies a little below 0.",
    "The dose that followed a level was chosen because of that level, so past patients are not a random sample of "
    "future ones.",
    "Doses up to each draw are taken from the record, as if they had been known when the forecast was made.",
    "Levels by the band in which they came show regression to the middle even with perfect forecasts; judge a "
    "method by the band it forecast.",
)


def findings(store: Store, site: Site) -> Findings:
    """One pass over the results of a run."""
    profile = load_profile(store.plan.drug)
    low, high, _ = site.target(profile)
    return gather(store.rows(), Bands(low, high, site.critical(profile)), count=store.plan.count)


def hints(found: Findings) -> list[Hint]:
    """One hint for each population with enough patients."""
    made = [refit(name, rows) for name, rows in sorted(found.placed.items())]
    return [h for h in made if h is not None]


def verdict(found: Findings, suggested: Sequence[Hint], methods: Sequence[str] = METHODS) -> list[str]:
    """What the findings say about trusting the tool here, in sentences. methods: those asked for."""
    whole = found.by_method.get(WHOLE)
    if whole is None and WHOLE not in methods:
        return [
            "The whole record, by which the tool forecasts, was not among the methods asked for: how far its "
            "forecasts can be trusted here is left open."
        ]
    if whole is None:
        return ["No level could be forecast from an earlier one, so nothing can be said about this department."]
    if whole.sums.patients < FEWEST_PATIENTS:
        return [
            f"{_count(whole.sums.patients, 'patient')} had a level forecast from an earlier one; with fewer than "
            f"{FEWEST_PATIENTS} nothing can be said about this department."
        ]
    said = []
    inside = whole.sums.share(IN90)
    assert inside.low is not None
    assert inside.high is not None
    words = f"{_percent(inside)} of the levels fell inside the 90 % interval of the whole record"
    if inside.high < 0.9:
        said.append(f"{words}: the intervals are too narrow here. Do not rely on them before the reason is found.")
    elif inside.low > 0.9:
        said.append(f"{words}: the intervals are wider than they need to be here, which is the safe side.")
    else:
        said.append(f"{words}, which agrees with 90 %.")
    higher = whole.sums.share(HIGHER)
    assert higher.low is not None
    assert higher.high is not None
    words = f"{_percent(higher)} of the levels came higher than the whole record forecast"
    if higher.low > 0.5:
        said.append(f"{words}: its forecasts err low, which is the unsafe side.")
    elif higher.high < 0.5:
        said.append(f"{words}: its forecasts err high.")
    else:
        said.append(f"{words}, which agrees with half: no error to one side is seen.")
    for other, name in ((PRIOR, "the population alone"), (TWO, "the two-level formula")):
        sums = found.against.get((other, WHOLE))
        if sums is not None and sums.patients >= FEWEST_PATIENTS:
            said.append(_compared(sums, name))
    for h in suggested:
        if h.off:
            said.append(
                f"These patients lie off the population {h.population} in {' and '.join(h.off)}: see the suggestion; "
                "nothing is changed by itself."
            )
    return said


def _compared(sums: Sums, name: str) -> str:
    d = sums.mean(DIFFERENCE)
    better = "smaller" if d.value < 0 else "larger"
    sure = d.low is not None and d.high is not None and not d.low <= 0 <= d.high
    tail = "" if sure else "; the interval holds no difference, too"
    return (
        f"On the same {sums.rows:,} levels the mean absolute error of the whole record is {abs(d.value):.2g} mg/L "
        f"{better} than that of {name} (difference {_mg(d)}){tail}."
    )


def report_data(store: Store, folder: Folder, found: Findings, suggested: Sequence[Hint]) -> dict[str, Any]:
    """The report as one JSON document."""
    plan = store.plan
    return {
        "pkcalc_backtest": VERSION,
        "synthetic": folder.synthetic,
        "drug": plan.drug,
        "version": plan.version,
        "results_date": plan.results_date,
        "site_sha256": plan.site,
        "input_sha256": plan.fingerprint,
        "methods": list(plan.methods),
        "complete": not store.missing(),
        "patients": {
            "in_folder": plan.count,
            "read": found.patients,
            "with_forecasts": found.forecast_patients,
            "set_aside": dict(sorted(found.set_aside.items())),
        },
        "rows_of_no_patient": {"count": folder.strays, "first": list(folder.strays_shown)},
        "levels_left_out": dict(sorted(found.left_out.items())),
        "no_forecast": [{"method": m, "reason": r, "levels": n} for (m, r), n in sorted(found.no_forecast.items())],
        "verdict": verdict(found, suggested, plan.methods),
        "reading": READING,
        "caveats": list(CAVEATS),
        "by_method": {m: t.as_dict() for m, t in _ordered(found.by_method)},
        "calibration": {
            m: [{"stated": s / 20, "inside": t.covered(s / 20)} for s in range(1, 20)]
            for m, t in _ordered(found.by_method)
        },
        "split": {
            by: {value: {m: t.as_dict() for m, t in _ordered(methods)} for value, methods in sorted(table.items())}
            for by, table in found.split.items()
        },
        "paired": [
            {
                "first": a,
                "second": b,
                "levels": s.rows,
                "patients": s.patients,
                "absolute_error_second_minus_first_mg_per_L": _share(s.mean(DIFFERENCE)),
                "share_second_nearer": _share(s.share(NEARER)),
            }
            for (a, b), s in sorted(found.against.items(), key=lambda x: [METHODS.index(m) for m in x[0]])
        ],
        "worst_misses": [_miss(r) for r in _worst(found)],
        "population_hint": [_hint(h) for h in suggested],
    }


def _ordered(methods: dict[str, Tally]) -> list[tuple[str, Tally]]:
    return [(m, methods[m]) for m in METHODS if m in methods]


def _share(s: Share) -> dict[str, float | None]:
    return {"value": s.value, "low": s.low, "high": s.high}


def _worst(found: Findings) -> list[Row]:
    return [r for *_, r in sorted(found.worst, key=lambda x: x[:3], reverse=True)]


def _miss(r: Row) -> dict[str, object]:
    return {
        "patient": r.patient,
        "level": r.level,
        "earlier_levels": r.earlier,
        "forecast_mg_per_L": r.forecast_mg_per_L,
        "low_90_mg_per_L": r.low_90_mg_per_L,
        "high_90_mg_per_L": r.high_90_mg_per_L,
        "came_mg_per_L": r.observed_mg_per_L,
    }


def _hint(h: Hint) -> dict[str, object]:
    return {
        "population": h.population,
        "patients": h.patients,
        "vmax_ratio": _share(h.vmax_ratio),
        "km_ratio": _share(h.km_ratio),
        "vmax_log_sd": _share(h.vmax_log_sd),
        "km_log_sd": _share(h.km_log_sd),
        "population_vmax_log_sd": h.prior_vmax_log_sd,
        "population_km_log_sd": h.prior_km_log_sd,
        "off": list(h.off),
        "applied": False,
    }


def _range(s: Share, form: str, factor: float = 1.0) -> str:
    value = format(s.value * factor, form)
    if s.low is None or s.high is None:
        return value
    return f"{value} ({format(s.low * factor, form)} to {format(s.high * factor, form)})"


def _percent(s: Share) -> str:
    if s.low is None or s.high is None:
        return f"{100 * s.value:.0f} %"
    return f"{100 * s.value:.0f} % ({100 * s.low:.0f} to {100 * s.high:.0f} %)"


def _mg(s: Share) -> str:
    return _range(s, ".2f") + " mg/L"


HEADS = (
    "Method",
    "Levels",
    "Patients",
    "Mean error, mg/L",
    "Mean absolute error, mg/L",
    "Median absolute error, mg/L",
    "Root mean square error, mg/L",
    "Within 20 %",
    "Within 30 %",
    "Inside 50 % interval",
    "Inside 90 % interval",
    "Came higher",
)


def _cells(tally: Tally) -> list[str]:
    s = tally.sums
    return [
        f"{s.rows:,}",
        f"{s.patients:,}",
        _range(s.mean(ERROR), ".2f"),
        _range(s.mean(ABSOLUTE), ".2f"),
        f"{tally.median_absolute_error():.2f}",
        f"{s.mean(SQUARE).value ** 0.5:.2f}",
        *(_percent(s.share(i)) for i in (IN20, IN30, IN50, IN90, HIGHER)),
    ]


def render_html(store: Store, folder: Folder, found: Findings, suggested: Sequence[Hint]) -> str:
    """The report as one HTML file, with no address outside it and no script."""
    from jinja2 import Environment, StrictUndefined

    from pkcalc.backtest.charts import charts

    plan = store.plan
    sections: list[dict[str, Any]] = [
        {
            "title": "By method",
            "heads": HEADS,
            "rows": [[m, *_cells(t)] for m, t in _ordered(found.by_method)],
        }
    ]
    for by, table in found.split.items():
        rows = [[value, m, *_cells(t)] for value in _in_order(by, table, found) for m, t in _ordered(table[value])]
        sections.append({"title": f"By {by}", "heads": (by.capitalize(), *HEADS), "rows": rows})
    sections.append(
        {
            "title": "Methods compared on the same levels",
            "heads": (
                "First",
                "Second",
                "Levels",
                "Patients",
                "Absolute error, second minus first, mg/L",
                "Second nearer",
            ),
            "rows": [
                [a, b, f"{s.rows:,}", f"{s.patients:,}", _range(s.mean(DIFFERENCE), ".2f"), _percent(s.share(NEARER))]
                for (a, b), s in sorted(found.against.items(), key=lambda x: [METHODS.index(m) for m in x[0]])
            ],
        }
    )
    sections.append(
        {
            "title": "Largest misses, to be looked at by a person",
            "heads": ("Patient", "Level", "Earlier levels", "Forecast, mg/L", "90 % interval, mg/L", "Came, mg/L"),
            "rows": [
                [
                    r.patient,
                    str(r.level),
                    str(r.earlier),
                    f"{r.forecast_mg_per_L:.1f}",
                    f"{r.low_90_mg_per_L:.1f} to {r.high_90_mg_per_L:.1f}",
                    f"{r.observed_mg_per_L:.1f}",
                ]
                for r in _worst(found)
            ],
        }
    )
    sections.append(
        {
            "title": "Suggested population, never applied by itself",
            "heads": (
                "Population",
                "Patients",
                "Vmax here / population",
                "Km here / population",
                "Log spread of Vmax (population)",
                "Log spread of Km (population)",
                "Off in",
            ),
            "rows": [
                [
                    h.population,
                    f"{h.patients:,}",
                    _range(h.vmax_ratio, ".2f"),
                    _range(h.km_ratio, ".2f"),
                    f"{_range(h.vmax_log_sd, '.2f')} ({h.prior_vmax_log_sd:.2f})",
                    f"{_range(h.km_log_sd, '.2f')} ({h.prior_km_log_sd:.2f})",
                    " and ".join(h.off) or "nothing",
                ]
                for h in suggested
            ],
        }
    )
    counted = [
        *(["patient set aside", r, f"{n:,}"] for r, n in sorted(found.set_aside.items())),
        *(["level left out", r, f"{n:,}"] for r, n in sorted(found.left_out.items())),
        *([f"no forecast by {m}", r, f"{n:,}"] for (m, r), n in sorted(found.no_forecast.items())),
    ]
    sections.append({"title": "What was left out, and why", "heads": ("What", "Reason", "Count"), "rows": counted})
    listed = list(islice(_outside(store.rows()), LIST_SHOWN))
    sections.append(
        {
            "title": f"Patients and levels left out, one by one (the first {LIST_SHOWN} here, all in left-out.csv)",
            "heads": ("Patient", "Level", "What", "Reason", "In words"),
            "rows": listed,
        }
    )
    for s in sections:
        s["heads"] = [_laid(head) for head in s["heads"]]
        s["rows"] = [[_laid(cell) for cell in row] for row in s["rows"]]
    text = resources.files("pkcalc.note.templates").joinpath("backtest.html.j2").read_text(encoding="utf-8")
    environment = Environment(autoescape=True, undefined=StrictUndefined)
    return environment.from_string(text).render(
        title=f"Back-test: {plan.drug}",
        synthetic=folder.synthetic,
        complete=not store.missing(),
        verdict=verdict(found, suggested, plan.methods),
        counts=_counts(store, folder, found),
        reading=READING,
        caveats=CAVEATS,
        privacy=PRIVACY,
        charts=[
            {"title": c.title, "alt": c.alt, "svg": base64.b64encode(c.svg().encode()).decode("ascii")}
            for c in charts(found)
        ],
        sections=sections,
        versions=f"pkcalc {plan.version}, results of {plan.results_date}; input {plan.fingerprint[:12]}",
    )


def _laid(cell: str) -> str:
    """A cell whose interval stands below its value, and whose numbers stay with their unit."""
    together = re.sub(r"(?<=\d) (?=%)", "\N{NO-BREAK SPACE}", cell)
    return re.sub(
        r" (\(-?[\d,.]+) to (-?[\d,.]+.?%?\))(?=$| )", "\n\\1\N{NO-BREAK SPACE}to\N{NO-BREAK SPACE}\\2", together
    )


def _in_order(by: str, table: dict[str, Any], found: Findings) -> list[str]:
    names = found.bands.names()
    return sorted(table, key=lambda v: (names.index(v), v) if by.startswith("level ") else (0, v))


def _count(n: int, what: str) -> str:
    return f"{n:,} {what}" if n == 1 else f"{n:,} {what}s"


def _counts(store: Store, folder: Folder, found: Findings) -> list[str]:
    plan = store.plan
    said = [
        f"{_count(plan.count, 'patient')} in the folder, {found.patients:,} read, {found.forecast_patients:,} with a "
        f"forecast, {sum(found.set_aside.values()):,} set aside."
    ]
    if folder.strays:
        where = "; ".join(folder.strays_shown[:5])
        said.append(
            f"{_count(folder.strays, 'run')} of rows without a patient in patients.csv: not used ({where}). If these "
            "are somebody's, that patient's record is not whole."
        )
    if store.missing():
        said.append(f"Missing: {_count(len(store.missing()), 'part')}. This report is not of the whole folder.")
    return said


def summary(store: Store, folder: Folder, found: Findings, suggested: Sequence[Hint]) -> str:
    """A few lines for the terminal."""
    lines = ["SYNTHETIC PATIENTS, not a department's own."] if folder.synthetic else []
    lines += _counts(store, folder, found)
    lines += [
        "",
        f"{'':<18}{'levels':>8}{'mean error':>12}{'median abs.':>12}{'within 30 %':>12}{'in 90 %':>9}{'higher':>10}",
    ]
    for m, t in _ordered(found.by_method):
        s = t.sums
        lines.append(
            f"{m:<18}{s.rows:>8,}{s.mean(ERROR).value:>7.2f} mg/L{t.median_absolute_error():>7.2f} mg/L"
            f"{100 * s.share(IN30).value:>10.0f} %{100 * s.share(IN90).value:>7.0f} %"
            f"{100 * s.share(HIGHER).value:>8.0f} %"
        )
    return "\n".join([*lines, "", *verdict(found, suggested, store.plan.methods)]) + "\n"


def _outside(rows: Iterable[Row]) -> Iterable[list[str]]:
    for r in rows:
        if r.kind in (SET_ASIDE, LEFT_OUT) or (r.kind == NO_FORECAST and r.method != TWO):
            what = r.kind if r.kind != NO_FORECAST else f"no forecast by {r.method}"
            yield [r.patient, str(r.level or ""), what, r.reason, r.detail]


def write_reports(store: Store, folder: Folder, site: Site) -> tuple[Findings, list[Hint]]:
    """report.json, report.html and left-out.csv beside the parts."""
    found = findings(store, site)
    suggested = hints(found)
    _write(store.path / "report.json", dumps(_finite(report_data(store, folder, found, suggested))))
    _write(store.path / "report.html", render_html(store, folder, found, suggested))
    half = store.path / "left-out.csv.half"
    with half.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(["patient", "level", "what", "reason", "in words"])
        for row in _outside(store.rows()):
            writer.writerow([_no_formula(c) for c in row])
    half.replace(store.path / "left-out.csv")
    return found, suggested


def _no_formula(cell: str) -> str:
    """A cell that no spreadsheet runs as a formula."""
    return f"'{cell}" if cell.startswith(("=", "+", "-", "@", "\t", "\r")) else cell


def _finite(data: dict[str, Any]) -> dict[str, Any]:
    """Without infinities: an upper bound beyond every plateau is given in words."""
    done: dict[str, Any] = json.loads(
        json.dumps(data, allow_nan=True), parse_constant=lambda word: "no steady state" if word == "Infinity" else None
    )
    return done


def _write(file: Path, text: str) -> None:
    half = file.with_name(file.name + ".half")
    half.write_text(text, encoding="utf-8")
    half.replace(file)
