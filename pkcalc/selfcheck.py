"""Re-runs published examples through the public functions, on any machine, for local acceptance before use.

The examples are `evidence/*.toml`, typed from their sources, never from our own output. The printed digits of
an expected value set its tolerance: half of the last digit, unless a wider one is given with its reason. Each
example is also run with each input moved by 20 % up and down: an input whose change goes unnoticed makes the
example worthless for it, so it fails unless the reason is written down.
"""

from __future__ import annotations

import csv
import json
import re
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import Any, Literal

import numpy as np

from pkcalc import formulas, kinetics, units
from pkcalc.drugs.profile import load_profile
from pkcalc.errors import CannotEstimate, CaseError, DrugFileError, PkcalcError
from pkcalc.site import no_site
from pkcalc.sources import source
from pkcalc.units import Q

Kind = Literal[
    "worked example",
    "label",
    "guideline",
    "dataset",
    "independent calculation",
    "definition",
    "common practice",
]
KINDS: tuple[Kind, ...] = (
    "worked example",
    "label",
    "guideline",
    "dataset",
    "independent calculation",
    "definition",
    "common practice",
)
STATUSES = ("read", "memory")

#: Written instead of expected values where the right answer is to refuse.
REFUSALS = ("no steady state", "refused")

Values = Mapping[str, Any]


@dataclass(frozen=True)
class Call:
    """One public function as the evidence files call it.

    inputs: name -> kind of unit ("number" and "word" carry none; a list of texts becomes an array of its
    kind). results: name -> kind. run: canonical values in, canonical values out.
    """

    inputs: Mapping[str, str]
    results: Mapping[str, str]
    run: Callable[[Values], Values]


@dataclass(frozen=True)
class Row:
    """One line of the table: what was expected, what we got, whether they agree, and what is odd about it."""

    id: str
    source: str
    where: str
    kind: str
    status: str
    quantity: str
    expected: str
    ours: str
    agrees: bool
    note: str = ""

    def as_dict(self) -> dict[str, object]:
        return dict(self.__dict__)


@dataclass(frozen=True)
class Expected:
    """An expected value: text, value and tolerance in the printed unit, that unit, and its kind."""

    name: str
    text: str
    value: float
    tolerance: float
    label: str
    kind: str


@dataclass(frozen=True)
class Example:
    """One published example, read from an evidence file."""

    id: str
    call: str
    source: str
    where: str
    kind: Kind
    status: str
    inputs: Mapping[str, Any]
    kinds: Mapping[str, str]
    expected: tuple[Expected, ...]
    refused: str
    unnoticed: Mapping[str, str]
    note: str


def _steady(v: Values) -> Values:
    level = kinetics.steady_state_level(Q(v["dose_rate"], "mg/day"), Q(v["vmax"], "mg/day"), Q(v["km"], "mg/L"))
    return {"level": _number(level, "mg/L")}


def _number(quantity: Any, unit: str) -> float:
    return float(quantity.to(units.unit_of(unit)).magnitude)


def _two_level(v: Values) -> Values:
    found = kinetics.two_level(
        Q(v["rate1"], "mg/day"), Q(v["level1"], "mg/L"), Q(v["rate2"], "mg/day"), Q(v["level2"], "mg/L")
    )
    return {"vmax": _number(found.vmax, "mg/day"), "km": _number(found.km, "mg/L")}


def _two_level_of_form(v: Values) -> Values:
    form = load_profile(v["drug"]).forms[v["form"]]
    rates = [
        float(
            formulas.active_amount(
                amount_mg=v[name], salt_factor=form.salt_factor, bioavailability=form.bioavailability
            )
        )
        for name in ("dose1", "dose2")
    ]
    found = _two_level({**v, "rate1": rates[0], "rate2": rates[1]})
    return {**found, "rate1": rates[0], "rate2": rates[1]}


def _ratio(v: Values) -> Values:
    before = _steady(v)["level"]
    after = _steady({"dose_rate": v["dose_rate2"], "vmax": v["vmax2"], "km": v["km2"]})["level"]
    return {"ratio": after / before, "change": after / before - 1.0}


def _one_level(v: Values) -> Values:
    vmax = float(
        formulas.vmax_from_level(dose_rate_mg_per_day=v["dose_rate"], level_mg_per_L=v["level"], km_mg_per_L=v["km"])
    )
    return {"vmax": vmax}


def _one_level_of_form(v: Values) -> Values:
    form = load_profile(v["drug"]).forms[v["form"]]
    active = float(formulas.active_amount(amount_mg=v["dose"], salt_factor=form.salt_factor))
    vmax = _one_level({"dose_rate": active, "level": v["level"], "km": v["km"]})["vmax"]
    rate = _rate({"level": v["aim"], "vmax": vmax, "km": v["km"]})["dose_rate"]
    product = float(formulas.product_amount(active_mg=rate, salt_factor=form.salt_factor))
    return {"vmax": vmax, "active_rate": rate, "product_rate": product}


def _rate(v: Values) -> Values:
    rate = kinetics.dose_rate_for_level(Q(v["level"], "mg/L"), Q(v["vmax"], "mg/day"), Q(v["km"], "mg/L"))
    return {"dose_rate": _number(rate, "mg/day")}


def _population(v: Values) -> Values:
    population = load_profile(v["drug"]).populations[v["population"]]
    prior = population.at(v["weight"], v["age"])
    return {"vmax": prior.vmax_mg_per_day, "km": prior.km_mg_per_L, "volume": prior.volume_L}


def _population_dose(v: Values) -> Values:
    form = load_profile(v["drug"]).forms[v["form"]]
    prior = _population(v)
    rate = _rate({"level": v["aim"], "vmax": prior["vmax"], "km": prior["km"]})["dose_rate"]
    product = float(formulas.product_amount(active_mg=rate, salt_factor=form.salt_factor))
    return {"active_rate": rate, "product_rate": product}


def _per_kg_ratio(v: Values) -> Values:
    populations = load_profile(v["drug"]).populations
    per_kg = []
    for name in ("population", "population2"):
        p = populations[v[name]]
        vmax = p.vmax_at_reference_mg_per_day / p.reference_weight_kg
        per_kg.append(_rate({"level": v["level"], "vmax": vmax, "km": p.km_mg_per_L})["dose_rate"])
    return {"more": per_kg[0] / per_kg[1] - 1.0}


def _course(v: Values) -> tuple[Any, Any, Any]:
    return Q(v["vmax"], "mg/day"), Q(v["km"], "mg/L"), Q(v["volume"], "L")


def _time_to_fraction(v: Values) -> Values:
    time = kinetics.time_to_fraction(v["fraction"], Q(v["dose_rate"], "mg/day"), *_course(v))
    return {"time": _number(time, "day")}


def _level_after(v: Values) -> Values:
    rate = Q(v.get("dose_rate", 0.0), "mg/day")
    level = kinetics.level_after(Q(v["time"], "day"), Q(v["start"], "mg/L"), rate, *_course(v))
    return {"level": _number(level, "mg/L")}


def _time_to_level(v: Values) -> Values:
    start, end = Q(v["start"], "mg/L"), Q(v["end"], "mg/L")
    time = kinetics.time_to_level(start, end, Q(v["dose_rate"], "mg/day"), *_course(v))
    return {"time": _number(time, "day")}


def _time_to_fall(v: Values) -> Values:
    time = kinetics.time_to_fall(Q(v["start"], "mg/L"), Q(v["end"], "mg/L"), *_course(v))
    return {"time": _number(time, "day")}


def _normalised(v: Values) -> Values:
    total = formulas.normalised_total(
        total_mg_per_L=v["total"], albumin_g_per_L=v["albumin"], coefficient_dL_per_g=v["coefficient"]
    )
    return {"normalised": float(total)}


def _break_point(v: Values) -> Values:
    return {"albumin": formulas.albumin_break_point(coefficient_dL_per_g=v["coefficient"])}


def _displaced(v: Values) -> Values:
    binding = load_profile(v["drug"]).binding
    assert binding is not None
    (line,) = (d for d in binding.displacements if d.id == v["displacement"])
    return {"free": line.free_mg_per_L(v["total"], v["displacer"])}


def _active_of_form(v: Values) -> Values:
    form = load_profile(v["drug"]).forms[v["form"]]
    return {"active": float(formulas.active_amount(amount_mg=v["amount"], salt_factor=form.salt_factor))}


def _product_volume(v: Values) -> Values:
    product = load_profile(v["drug"]).products[v["product"]]
    return {"volume": v["amount"] / product.mg_per_unit / 1000}


def _rate_cap(v: Values) -> Values:
    cap = no_site().rate_cap(load_profile(v["drug"]), v["form"], v["group"])
    assert cap is not None
    return {"rate": 1440 * cap.mg_per_min, "rate_per_weight": 1440 * (cap.mg_per_kg_min or 0.0)}


def _load(v: Values) -> Values:
    amount = formulas.top_up_amount(
        present_mg_per_L=v.get("present", 0.0),
        aim_mg_per_L=v["aim"],
        volume_L=v["weight"] * v["volume_per_weight"],
        salt_factor=v["salt_factor"],
    )
    return {"amount": float(amount)}


def _ideal_weight(v: Values) -> Values:
    return {"weight": float(formulas.ideal_body_weight(height_cm=v["height"], sex=v["sex"]))}


def _excess_weight(v: Values) -> Values:
    weight = formulas.weight_with_excess(weight_kg=v["weight"], ideal_weight_kg=v["ideal"], excess_factor=v["factor"])
    return {"weight": float(weight)}


def _molar(v: Values) -> Values:
    mass = load_profile(v["drug"]).molar_mass_g_per_mol
    return {
        "molar": float(formulas.molar_level(level_mg_per_L=v["level"], molar_mass_g_per_mol=mass)),
    }


def _typed_level(v: Values) -> Values:
    mass = load_profile(v["drug"]).molar_mass_g_per_mol
    return {"level": units.read(v["typed"], "level", "Level", molar_mass_g_per_mol=mass).value}


def _strength(v: Values) -> Values:
    return {"strength": load_profile(v["drug"]).products[v["product"]].mg_per_unit}


def _load_volume(v: Values) -> Values:
    product = load_profile(v["drug"]).products[v["product"]]
    return {"volume": v["load"] * v["weight"] / product.mg_per_unit / 1000}


def _rate_of_volume(v: Values) -> Values:
    product = load_profile(v["drug"]).products[v["product"]]
    return {"rate_per_weight": 24 * v["mL_per_kg_h"] * product.mg_per_unit}


def _population_hold(v: Values) -> Values:
    """The rate per kg that holds a level in a named population, with dialysis or without; and its volume."""
    profile = load_profile(v["drug"])
    prior = profile.populations[v["population"]].at(v["weight"], 40)
    rate = formulas.dose_rate_for_level(
        level_mg_per_L=v["level"],
        vmax_mg_per_day=prior.vmax_mg_per_day,
        km_mg_per_L=prior.km_mg_per_L,
        linear_clearance_L_per_day=v.get("clearance", 0.0),
    )
    per_weight = float(rate) / v["weight"]
    product = profile.products[v["product"]]
    return {"rate_per_weight": per_weight, "mL_per_kg_h": per_weight / 24 / product.mg_per_unit}


def _regimen(v: Values) -> Values:
    """What the plan says of a regimen in a patient known exactly: steady level, as reported at an albumin, and the
    time to 90 % of the way from nothing."""
    from pkcalc.case import read_case_text
    from pkcalc.dosing import Intake, Regimen
    from pkcalc.estimate.result import Band, Estimate, Point
    from pkcalc.forecast import Goal
    from pkcalc.levels import lab_scale
    from pkcalc.plan.candidates import Setting, candidates

    profile, site, target = load_profile(v["drug"]), no_site(), load_profile(v["drug"]).target
    vmax, km, volume = v["vmax"], v["km"], v["volume"]
    exact = {"vmax_mg_per_day": vmax, "km_mg_per_L": km, "volume_L": volume}
    estimate = Estimate(
        method="given",
        weights=np.ones(1),
        point=Point(vmax, km, volume, "closed form"),
        summary={name: Band(x, x, x) for name, x in exact.items()},
        correlation=0.0,
        volume_from="record",
        vmax_mg_per_day=np.array([vmax]),
        km_mg_per_L=np.array([km]),
        volume_L=np.array([volume]),
    )
    written = {"pkcalc_case": 1, "drug": v["drug"], "albumin": {"value": f"{v['albumin']:.6g} g/L"}}
    case = read_case_text(json.dumps(written))
    setting = Setting(
        profile=profile,
        site=site,
        goal=Goal(
            target.low_mg_per_L, target.high_mg_per_L, target.critical_mg_per_L, target.aim_mg_per_L, "drug file"
        ),
        scale=lab_scale(case, profile, site, case.albumin),
        central=estimate,
        taken=estimate,
        start_mg_per_L=0.0,
        draw_days=3.0,
        present_mg_per_day=None,
        largest_mg_per_day=float("inf"),
    )
    regimen = Regimen((Intake(v["form"], 21.0, v["dose"]),))
    (found,) = candidates((), [(regimen, "", "", False, True)], setting)
    f = found.forecast
    if not np.isfinite(f.steady.median):
        raise CannotEstimate(found="No steady state.", why="The rate is at or above Vmax.", helps="A smaller dose.")
    assert f.settle_days is not None
    return {"steady": f.steady.median, "reported": f.total.median, "time": f.settle_days.median}


def _straight_line(v: Values) -> Values:
    from pkcalc.estimate.lines import straight_line

    found = straight_line(v["line"], level=v["levels"], rate=v["rates"])
    return {"vmax": float(found.vmax), "km": float(found.km)}


def _direct_linear(v: Values) -> Values:
    """Every crossing at its face value, as the published examples take them."""
    from pkcalc.estimate.lines import crossings

    found = crossings(level=v["levels"], rate=v["rates"], error_in="rate")
    return {"vmax": float(np.median(found.vmax)), "km": float(np.median(found.km))}


def _regression(v: Values) -> Values:
    from pkcalc.estimate.regression import rate_on_level

    fit = rate_on_level(level=v["levels"], rate=v["rates"])
    return {
        "vmax": fit.vmax,
        "km": fit.km,
        "km_inverse": 1.0 / fit.km,
        "se_vmax": fit.se_vmax,
        "se_km": fit.se_km,
        "sigma": fit.sigma,
    }


_POINTS = {"levels": "number", "rates": "number"}
_PAIR = {"rate1": "dose rate", "level1": "level", "rate2": "dose rate", "level2": "level"}
_MM = {"vmax": "dose rate", "km": "level"}

#: Every function an evidence file may call, by the name it is called there.
CALLS: dict[str, Call] = {
    "steady_state_level": Call({"dose_rate": "dose rate", **_MM}, {"level": "level"}, _steady),
    "dose_rate_for_level": Call({"level": "level", **_MM}, {"dose_rate": "dose rate"}, _rate),
    "two_level": Call(_PAIR, {"vmax": "dose rate", "km": "level"}, _two_level),
    "two_level_of_form": Call(
        {
            "drug": "word",
            "form": "word",
            "dose1": "dose rate",
            "level1": "level",
            "dose2": "dose rate",
            "level2": "level",
        },
        {"vmax": "dose rate", "km": "level", "rate1": "dose rate", "rate2": "dose rate"},
        _two_level_of_form,
    ),
    "steady_level_ratio": Call(
        {"dose_rate": "dose rate", **_MM, "dose_rate2": "dose rate", "vmax2": "dose rate", "km2": "level"},
        {"ratio": "number", "change": "share"},
        _ratio,
    ),
    "vmax_from_level": Call(
        {"dose_rate": "dose rate", "level": "level", "km": "level"}, {"vmax": "dose rate"}, _one_level
    ),
    "one_level_of_form": Call(
        {
            "drug": "word",
            "form": "word",
            "dose": "dose rate",
            "level": "level",
            "km": "level",
            "aim": "level",
        },
        {"vmax": "dose rate", "active_rate": "dose rate", "product_rate": "dose rate"},
        _one_level_of_form,
    ),
    "population_at": Call(
        {"drug": "word", "population": "word", "weight": "weight", "age": "age"},
        {"vmax": "dose rate", "km": "level", "volume": "volume"},
        _population,
    ),
    "population_dose": Call(
        {
            "drug": "word",
            "population": "word",
            "form": "word",
            "weight": "weight",
            "age": "age",
            "aim": "level",
        },
        {"active_rate": "dose rate", "product_rate": "dose rate"},
        _population_dose,
    ),
    "dose_per_kg_ratio": Call(
        {"drug": "word", "population": "word", "population2": "word", "level": "level"},
        {"more": "share"},
        _per_kg_ratio,
    ),
    "time_to_fraction": Call(
        {"fraction": "share", "dose_rate": "dose rate", **_MM, "volume": "volume"},
        {"time": "duration"},
        _time_to_fraction,
    ),
    "level_after": Call(
        {"time": "duration", "start": "level", "dose_rate": "dose rate", **_MM, "volume": "volume"},
        {"level": "level"},
        _level_after,
    ),
    "time_to_level": Call(
        {"start": "level", "end": "level", "dose_rate": "dose rate", **_MM, "volume": "volume"},
        {"time": "duration"},
        _time_to_level,
    ),
    "time_to_fall": Call(
        {"start": "level", "end": "level", **_MM, "volume": "volume"}, {"time": "duration"}, _time_to_fall
    ),
    "normalised_total": Call(
        {"total": "level", "albumin": "albumin", "coefficient": "number"},
        {"normalised": "level"},
        _normalised,
    ),
    "albumin_break_point": Call({"coefficient": "number"}, {"albumin": "albumin"}, _break_point),
    "free_with_displacer": Call(
        {"drug": "word", "displacement": "word", "total": "level", "displacer": "level"},
        {"free": "level"},
        _displaced,
    ),
    "active_amount_of_form": Call(
        {"drug": "word", "form": "word", "amount": "amount"}, {"active": "amount"}, _active_of_form
    ),
    "product_volume": Call(
        {"drug": "word", "product": "word", "amount": "amount"}, {"volume": "volume"}, _product_volume
    ),
    "rate_cap": Call(
        {"drug": "word", "form": "word", "group": "word"},
        {"rate": "dose rate", "rate_per_weight": "dose rate per weight"},
        _rate_cap,
    ),
    "load": Call(
        {
            "present": "level",
            "aim": "level",
            "weight": "weight",
            "volume_per_weight": "volume per weight",
            "salt_factor": "number",
        },
        {"amount": "amount"},
        _load,
    ),
    "ideal_body_weight": Call({"height": "height", "sex": "word"}, {"weight": "weight"}, _ideal_weight),
    "weight_with_excess": Call(
        {"weight": "weight", "ideal": "weight", "factor": "number"}, {"weight": "weight"}, _excess_weight
    ),
    "straight_line": Call({"line": "word", **_POINTS}, {"vmax": "number", "km": "number"}, _straight_line),
    "direct_linear_plot": Call(_POINTS, {"vmax": "number", "km": "number"}, _direct_linear),
    "regression": Call(
        _POINTS,
        dict.fromkeys(("vmax", "km", "km_inverse", "se_vmax", "se_km", "sigma"), "number"),
        _regression,
    ),
    "typed_level": Call({"drug": "word", "typed": "word"}, {"level": "level"}, _typed_level),
    "product_strength": Call({"drug": "word", "product": "word"}, {"strength": "strength"}, _strength),
    "load_volume": Call(
        {"drug": "word", "product": "word", "load": "amount per weight", "weight": "weight"},
        {"volume": "volume"},
        _load_volume,
    ),
    "rate_of_volume": Call(
        {"drug": "word", "product": "word", "mL_per_kg_h": "number"},
        {"rate_per_weight": "dose rate per weight"},
        _rate_of_volume,
    ),
    "population_hold": Call(
        {
            "drug": "word",
            "population": "word",
            "product": "word",
            "level": "level",
            "weight": "weight",
            "clearance": "clearance",
        },
        {"rate_per_weight": "dose rate per weight", "mL_per_kg_h": "number"},
        _population_hold,
    ),
    "regimen_of_form": Call(
        {"drug": "word", "form": "word", "dose": "amount", **_MM, "volume": "volume", "albumin": "albumin"},
        {"steady": "level", "reported": "level", "time": "duration"},
        _regimen,
    ),
    "molar_level": Call({"drug": "word", "level": "level"}, {"molar": "molar"}, _molar),
}

_KEYS = {
    "id",
    "call",
    "source",
    "where",
    "kind",
    "status",
    "inputs",
    "expected",
    "tolerance",
    "why",
    "unnoticed",
    "note",
}
_FACTORS = {
    **units.FACTORS,
    "number": {"": 1.0},
    "molar": {"umol/L": 1.0, "mmol/L": 1000.0},
    "strength": {"mg/mL": 1.0, "g/dL": 10.0},
}
_NUMBER = re.compile(r"-?[0-9][0-9,]*(?:\.[0-9]+)?")


def evidence_files() -> tuple[str, ...]:
    """The evidence files, by name."""
    folder = resources.files("pkcalc.evidence")
    return tuple(sorted(p.name for p in folder.iterdir() if p.name.endswith(".toml")))


@cache
def load_examples() -> tuple[Example, ...]:
    """Every example of every evidence file."""
    found: list[Example] = []
    for name in evidence_files():
        text = resources.files("pkcalc.evidence").joinpath(name).read_text(encoding="utf-8")
        found.extend(parse_examples(text, name))
    ids = [x.id for x in found]
    doubled = sorted({i for i in ids if ids.count(i) > 1})
    if doubled:
        raise DrugFileError(f"Evidence: the id {doubled[0]} stands more than once. Give each its own.")
    return tuple(found)


def parse_examples(text: str, file: str) -> tuple[Example, ...]:
    """The examples of one TOML text; refuses anything incomplete."""
    data = tomllib.loads(text)
    if set(data) != {"example"}:
        raise DrugFileError(f"{file}: only [[example]] tables may stand here.")
    return tuple(_example(entry, file) for entry in data["example"])


def _example(entry: dict[str, Any], file: str) -> Example:
    name = entry.get("id", "(no id)")

    def fail(key: str, found: str, fix: str) -> DrugFileError:
        return DrugFileError(f"{file}, {name}, {key}: {found}. {fix}.")

    for key in entry:
        if key not in _KEYS:
            raise fail(key, "unknown entry", "Known are: " + ", ".join(sorted(_KEYS)))
    for key in ("id", "call", "source", "where", "kind", "status"):
        if not isinstance(entry.get(key), str) or not entry[key].strip():
            raise fail(key, "missing", "Add it as text")
    if entry["call"] not in CALLS:
        raise fail("call", f'"{entry["call"]}" is not a known function', "Known are: " + ", ".join(sorted(CALLS)))
    if entry["kind"] not in KINDS:
        raise fail("kind", f'"{entry["kind"]}" was found', "Write one of: " + ", ".join(KINDS))
    if entry["status"] not in STATUSES:
        raise fail("status", f'"{entry["status"]}" was found', "Write one of: " + ", ".join(STATUSES))
    cited = source(entry["source"])
    if entry["status"] == "read" and cited.status == "memory":
        raise fail("status", 'it says "read", but its source is from memory', 'Write "memory"')
    call = CALLS[entry["call"]]
    inputs = {}
    for key, raw in entry.get("inputs", {}).items():
        if key not in call.inputs:
            raise fail(f"inputs.{key}", "unknown input", "Known are: " + ", ".join(call.inputs))
        inputs[key] = _read(raw, call.inputs[key], f"{file}, {name}, {key}")
    tolerances = entry.get("tolerance", {})
    if tolerances and not entry.get("why"):
        raise fail("why", "missing", "A tolerance wider than the printed digits needs its reason")
    expected_text = entry.get("expected")
    refused = expected_text in REFUSALS
    wanted: dict[str, str] = expected_text if isinstance(expected_text, dict) else {}
    if not refused and not wanted:
        raise fail("expected", "missing", "Add the expected values, or one of: " + ", ".join(REFUSALS))
    expected = tuple(_expected(key, value, call, tolerances.get(key), fail) for key, value in wanted.items())
    for key in tolerances:
        if key not in wanted:
            raise fail(f"tolerance.{key}", "no such expected value", "Take it out or mend its name")
    unnoticed = entry.get("unnoticed", {})
    for key in unnoticed:
        if key not in inputs:
            raise fail(f"unnoticed.{key}", "no such input", "Take it out or mend its name")
    note = " ".join(x for x in (entry.get("note", ""), entry.get("why", "")) if x)
    if entry["status"] == "memory":
        note = f"Value from memory. {note}".strip()
    return Example(
        id=entry["id"],
        call=entry["call"],
        source=entry["source"],
        where=entry["where"],
        kind=entry["kind"],
        status=entry["status"],
        inputs=inputs,
        kinds={key: call.inputs[key] for key in inputs},
        expected=expected,
        refused=str(expected_text) if refused else "",
        unnoticed=unnoticed,
        note=note,
    )


def _read(raw: Any, kind: str, where: str) -> Any:
    """An input as the function takes it: canonical value, array, or word."""
    if isinstance(raw, list):
        return np.array([_read(x, kind, where) for x in raw])
    if not isinstance(raw, str):
        raise DrugFileError(f"{where}: not a text. Write numbers in quotation marks, with their unit.")
    if kind == "word":
        return raw
    if kind == "number":
        return units.read_number(raw, where)
    return units.read(raw, kind, where, zero_allowed=True).value


def _expected(key: str, text: Any, call: Call, wider: Any, fail: Callable[[str, str, str], DrugFileError]) -> Expected:
    if key not in call.results:
        raise fail(f"expected.{key}", "unknown result", "Known are: " + ", ".join(call.results))
    match = _NUMBER.match(text) if isinstance(text, str) else None
    if match is None:
        raise fail(f"expected.{key}", "not a number with its unit in quotation marks", "Write it as printed")
    number, label = match.group(0), text[match.end() :].strip()
    kind = call.results[key]
    if label not in _FACTORS[kind]:
        raise fail(f"expected.{key}", f'the unit "{label}" was found', "Write one of: " + ", ".join(_FACTORS[kind]))
    digits = number.replace(",", "")
    decimals = len(digits.partition(".")[2])
    tolerance = 0.5 * 10.0**-decimals
    if wider is not None:
        tolerance = float(wider)
    return Expected(key, text, float(digits), tolerance, label, kind)


def _ours(example: Example, values: Values) -> dict[str, float]:
    """Our results in the printed units."""
    found = CALLS[example.call].run(values)
    return {x.name: found[x.name] / _FACTORS[x.kind][x.label] for x in example.expected}


def _within(example: Example, found: Mapping[str, float]) -> bool:
    return all(_agrees(x, found[x.name]) for x in example.expected)


def _agrees(expected: Expected, value: float) -> bool:
    return abs(value - expected.value) <= expected.tolerance * (1 + 1e-9)


def unnoticed_inputs(example: Example) -> tuple[str, ...]:
    """Inputs that could be 20 % off, up or down, without the example noticing."""
    silent = []
    for key, kind in example.kinds.items():
        if kind == "word":
            continue
        same = [_same(example, {**example.inputs, key: example.inputs[key] * factor}) for factor in (1.2, 0.8)]
        # a refusal may rightly stand in one direction; a number must change in both
        if all(same) if example.refused else any(same):
            silent.append(key)
    return tuple(silent)


def _same(example: Example, values: Values) -> bool:
    if example.refused:
        return _refuses(example, values)
    try:
        return _within(example, _ours(example, values))
    except PkcalcError:
        return False


def _refuses(example: Example, values: Values) -> bool:
    """True where the function says that no number follows; input it cannot read is another matter."""
    try:
        CALLS[example.call].run(values)
    except CannotEstimate:
        return True
    except CaseError:
        return False
    return False


def check(example: Example) -> tuple[Row, ...]:
    """The example's rows: one for each expected value, agreeing only if every input would be noticed too."""
    silent = set(unnoticed_inputs(example)) ^ set(example.unnoticed)
    note = example.note
    if silent:
        note = f"{note} Not sensitive as declared: {', '.join(sorted(silent))}.".strip()

    def row(quantity: str, expected: str, ours: str, agrees: bool) -> Row:
        return Row(
            id=example.id,
            source=example.source,
            where=example.where,
            kind=example.kind,
            status=example.status,
            quantity=quantity,
            expected=expected,
            ours=ours,
            agrees=agrees and not silent,
            note=note,
        )

    if example.refused:
        refused = _refuses(example, example.inputs)
        return (row(example.call, example.refused, example.refused if refused else "a number", refused),)
    try:
        found = _ours(example, example.inputs)
    except PkcalcError as error:
        return tuple(row(x.name, x.text, f"refused: {error}", False) for x in example.expected)
    return tuple(
        row(
            x.name,
            x.text,
            f"{units.show_number(found[x.name], 6)} {x.label}".strip(),
            _agrees(x, found[x.name]),
        )
        for x in example.expected
    )


def run() -> tuple[Row, ...]:
    """Every example of every evidence file, and the reference curves."""
    return tuple(row for example in load_examples() for row in check(example)) + reference_curves()


#: Reference files: name, column of the level, largest relative difference (ten times it below 1e-6 mg/L).
_CURVES = (
    ("mm_reference_curves.csv", "C_mg_per_L_25digits", 1e-13),
    ("mm_edge_cases.csv", "C_ref_22digits", 1e-13),
)
_COLUMNS = {"C0_mg_per_L": "C0", "r_mg_per_L_per_d": "r", "v_mg_per_L_per_d": "v", "Km_mg_per_L": "Km"}


def reference_curves() -> tuple[Row, ...]:
    """Level over time at a constant rate against values of 22 to 25 digits: the worst relative difference."""
    rows = []
    for name, column, allowed in _CURVES:
        text = resources.files("pkcalc.evidence").joinpath(name).read_text(encoding="utf-8")
        table = list(csv.DictReader(text.splitlines()))
        values = {
            _COLUMNS.get(key, key): np.array([float(line[key]) for line in table])
            for key in table[0]
            if key not in ("case", "tag")
        }
        ours = formulas.level_after(
            time_day=values["t_d"],
            start_mg_per_L=values["C0"],
            dose_rate_mg_per_day=values["r"],
            vmax_mg_per_day=values["v"],
            km_mg_per_L=values["Km"],
            volume_L=1.0,
        )
        expected = values[column]
        difference = np.abs(ours / expected - 1.0) / np.where(expected < 1e-6, 10.0, 1.0)
        worst = float(np.max(difference))
        rows.append(
            Row(
                id=name.removesuffix(".csv"),
                source="reference-times",
                where=f"{len(table)} levels in 80- to 120-digit arithmetic",
                kind="independent calculation",
                status="read",
                quantity="largest relative difference",
                expected=f"at most {allowed:.0e}",
                ours=f"{worst:.1e}",
                agrees=worst <= allowed,
            )
        )
    return tuple(rows)


def as_text(rows: tuple[Row, ...]) -> str:
    """The table: case, source, expected, ours, agrees."""
    head = ("case", "source", "quantity", "expected", "ours", "agrees")
    cells = [head] + [
        (r.id, r.source, r.quantity.replace("_", " "), r.expected, r.ours, "yes" if r.agrees else "NO") for r in rows
    ]
    widths = [max(len(line[i]) for line in cells) for i in range(len(head))]
    lines = ["  ".join(c.ljust(w) for c, w in zip(line, widths, strict=True)).rstrip() for line in cells]
    lines.insert(1, "  ".join("-" * w for w in widths))
    missed = [r for r in rows if not r.agrees]
    lines += ["", f"{len(rows) - len(missed)} of {len(rows)} agree."]
    lines += [f"{r.id}: {r.note}" for r in missed if r.note]
    return "\n".join(lines) + "\n"


def as_data(rows: tuple[Row, ...]) -> dict[str, object]:
    """The same as plain data for JSON."""
    return {
        "rows": [r.as_dict() for r in rows],
        "agree": sum(r.agrees for r in rows),
        "of": len(rows),
        "all_agree": all(r.agrees for r in rows),
    }
