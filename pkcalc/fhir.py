"""A FHIR R4 bundle in, a case file out, with at least one line for every entry saying what became of it.

Ordered is not given: only administrations count; orders and statements come in as ordered or stated and
unconfirmed. Nothing is guessed: what a bundle does not say, or says twice in different words, stays empty in
the case file, and the case cannot be run until a person has filled it. Name, identifiers and birth date are
dropped.
"""

from __future__ import annotations

import json
import re
from bisect import bisect_left
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from decimal import Decimal
from itertools import pairwise
from pathlib import Path
from typing import Any, Literal, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError

from pkcalc import units
from pkcalc.case import CaseFile, check_case, parse_case_text, place_in_words
from pkcalc.clock import days_between, read_time, show_time
from pkcalc.drugs.profile import Code, Profile, drug_names, load_profile
from pkcalc.errors import CaseError, Problem

MAX_BYTES = 5_000_000
MAX_ENTRIES = 5_000
MAX_DEPTH = 40
MAX_REFERENCE = 300

UCUM = "http://unitsofmeasure.org"
LOINC = "http://loinc.org"

#: The UCUM codes read, exactly as written, and our label of each. Anything else is not understood.
LEVEL_UNITS = {
    "mg/L": "mg/L",
    "ug/mL": "mcg/mL",
    "umol/L": "umol/L",
    "mg/dL": "mg/dL",
    "mmol/L": "mmol/L",
}
ALBUMIN_UNITS = {"g/L": "g/L", "g/dL": "g/dL"}
AMOUNT_UNITS = {"mg": "mg", "g": "g"}
RATE_UNITS = {"mg/h": "mg/h", "mg/min": "mg/min", "mg/d": "mg/day"}
PER_UNITS = {"h": "h", "min": "min", "d": "day"}
MOLAR_LABELS = ("umol/L", "mmol/L")

#: Routes in words. Codes are not read: none of them could be checked against its publisher.
ROUTES = {
    "oral": "oral",
    "oral route": "oral",
    "by mouth": "oral",
    "po": "oral",
    "intravenous": "intravenous",
    "intravenous route": "intravenous",
    "iv": "intravenous",
    "intramuscular": "intramuscular",
    "intramuscular route": "intramuscular",
    "im": "intramuscular",
    "feeding tube": "feeding tube",
    "nasogastric": "feeding tube",
    "nasogastric route": "feeding tube",
    "enteral": "feeding tube",
}

FINAL = ("final", "amended", "corrected")
ORDERS = ("order", "original-order", "instance-order", "filler-order", "reflex-order")
SAME_LEVEL = 0.02  # two reports of one sample in two units agree this closely, rounding included
FEWEST_IN_A_RUN = 3

_DATE = re.compile(
    r"(\d{4})(?:-(\d{2})(?:-(\d{2})(?:T(\d{2}:\d{2})(?::(\d{2})(?:\.\d{1,9})?)?(Z|[+-]\d{2}:\d{2}))?)?)?",
    re.ASCII,
)
_RESTFUL = re.compile(r"(.+/)?([A-Z][A-Za-z]+)/([A-Za-z0-9\-.]{1,64})(?:/_history/.*)?")
_EQUIVALENTS = re.compile(r"\bPE\b")

Outcome = Literal["read", "check", "left out", "not understood"]


# --- what is read of each resource -----------------------------------------------------------------------

_LAX = ConfigDict(extra="ignore", frozen=True, strict=True, hide_input_in_errors=True)


class Coding(BaseModel):
    """One code of one system."""

    model_config = _LAX
    system: str = ""
    code: str = ""
    display: str = ""


class Concept(BaseModel):
    """A concept: its codes, and its text."""

    model_config = _LAX
    coding: list[Coding] = []
    text: str = ""

    @property
    def words(self) -> str:
        """How a person would read it."""
        named = self.text or next((c.display for c in self.coding if c.display), "")
        return _clip(named or ", ".join(c.code for c in self.coding if c.code) or "not named")


class Quantity(BaseModel):
    """A number with its unit."""

    model_config = _LAX
    value: Decimal | None = None
    comparator: str = ""
    unit: str = ""
    system: str = ""
    code: str = ""


class Ratio(BaseModel):
    """One quantity per another."""

    model_config = _LAX
    numerator: Quantity = Quantity()
    denominator: Quantity = Quantity()


class Period(BaseModel):
    """A start and an end."""

    model_config = _LAX
    start: str = ""
    end: str = ""


class Reference(BaseModel):
    """A pointer to another resource."""

    model_config = _LAX
    reference: str = ""


class Observation(BaseModel):
    """A laboratory result."""

    model_config = _LAX
    status: str = ""
    code: Concept
    effectiveDateTime: str = ""
    effectiveInstant: str = ""
    effectivePeriod: Period | None = None
    valueQuantity: Quantity | None = None


class GivenDosage(BaseModel):
    """What an administration says was given."""

    model_config = _LAX
    text: str = ""
    route: Concept | None = None
    dose: Quantity | None = None
    rateRatio: Ratio | None = None
    rateQuantity: Quantity | None = None


class Administration(BaseModel):
    """A dose given, or not given."""

    model_config = _LAX
    status: str = ""
    medicationCodeableConcept: Concept | None = None
    medicationReference: Reference | None = None
    effectiveDateTime: str = ""
    effectivePeriod: Period | None = None
    request: Reference | None = None
    dosage: GivenDosage | None = None


class DoseAndRate(BaseModel):
    """The amount of an order."""

    model_config = _LAX
    doseQuantity: Quantity | None = None
    doseRange: dict[str, Any] | None = None
    rateQuantity: Quantity | None = None
    rateRatio: Ratio | None = None


class Repeat(BaseModel):
    """How an order repeats."""

    model_config = _LAX
    boundsPeriod: Period | None = None
    count: Decimal | None = None
    frequency: Decimal | None = None
    frequencyMax: Decimal | None = None
    period: Decimal | None = None
    periodMax: Decimal | None = None
    periodUnit: str = ""
    dayOfWeek: list[str] = []
    timeOfDay: list[str] = []
    when: list[str] = []


class Timing(BaseModel):
    """When an order is due."""

    model_config = _LAX
    event: list[str] = []
    repeat: Repeat | None = None
    code: Concept | None = None


class OrderedDosage(BaseModel):
    """What an order or a statement says should be taken."""

    model_config = _LAX
    text: str = ""
    timing: Timing | None = None
    asNeededBoolean: bool = False
    asNeededCodeableConcept: Concept | None = None
    route: Concept | None = None
    doseAndRate: list[DoseAndRate] = []


class Order(BaseModel):
    """A MedicationRequest or a MedicationStatement."""

    model_config = _LAX
    status: str = ""
    intent: str = ""
    doNotPerform: bool = False
    medicationCodeableConcept: Concept | None = None
    medicationReference: Reference | None = None
    effectivePeriod: Period | None = None
    effectiveDateTime: str = ""
    authoredOn: str = ""
    dosageInstruction: list[OrderedDosage] = []
    dosage: list[OrderedDosage] = []


class Medication(BaseModel):
    """A product."""

    model_config = _LAX
    code: Concept = Concept()


class PatientResource(BaseModel):
    """Of the patient only age and sex are read."""

    model_config = _LAX
    gender: str = ""
    birthDate: str = ""


class Condition(BaseModel):
    """A diagnosis: listed with the questions it may bear on, never read into an answer."""

    model_config = _LAX
    code: Concept = Concept()
    clinicalStatus: Concept | None = None
    verificationStatus: Concept | None = None
    onsetDateTime: str = ""
    recordedDate: str = ""


# --- the answer ------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Line:
    """What became of one entry (0: of the bundle as a whole), and what a person should do about it."""

    entry: int
    resource: str
    outcome: Outcome
    said: str
    fix: str = ""

    @property
    def text(self) -> str:
        place = f"Entry {self.entry}, {self.resource}" if self.entry else "Bundle"
        return f"{place}: {self.outcome}. {self.said}" + (f" {self.fix}" if self.fix else "")

    def as_dict(self) -> dict[str, Any]:
        return {
            "entry": self.entry,
            "resource": self.resource,
            "outcome": self.outcome,
            "said": self.said,
            "fix": self.fix,
        }


@dataclass(frozen=True)
class Imported:
    """A case file with what was not understood. to_fill: what must be filled before the case can be run."""

    file: CaseFile
    lines: tuple[Line, ...]
    to_fill: tuple[Problem, ...]
    advice: tuple[str, ...]

    @property
    def ready(self) -> bool:
        return not self.to_fill

    def as_dict(self) -> dict[str, Any]:
        return {
            "ready": self.ready,
            "to_fill": [p.as_dict() for p in self.to_fill],
            "entries": [line.as_dict() for line in self.lines],
            "advice": list(self.advice),
        }

    def report(self) -> str:
        """The list for a person: what must be filled, what to check, what was left out."""
        counted = Counter(line.outcome for line in self.lines if line.entry)
        order: tuple[Outcome, ...] = ("read", "check", "left out", "not understood")
        out = ["Entries: " + ", ".join(f"{counted[o]} {o}" for o in order) + "."]
        if self.to_fill:
            out.append("The case cannot be run until these are filled in the case file:")
            out += [f"- {p.text}" for p in self.to_fill]
        else:
            out.append("The case can be read; check it against the chart all the same.")
        for outcome, title in (
            ("check", "Read, but to be checked against the chart:"),
            ("not understood", "Not understood and not used:"),
            ("left out", "Left out:"),
        ):
            listed = [line for line in self.lines if line.outcome == outcome]
            if listed:
                out.append(title)
                out += [f"- {line.text}" for line in listed]
        out += list(self.advice)
        return "\n".join(out) + "\n"


def load_bundle(path: str | Path, *, drug: str, products: Mapping[str, str] | None = None) -> Imported:
    """A bundle's file -> case file and what was not understood; CaseError where it cannot be read."""
    file = Path(path)
    try:
        size = file.stat().st_size
        if size > MAX_BYTES:
            raise CaseError(_too_large(size))
        data = file.read_bytes()
    except OSError as error:
        reason = (error.strerror or "it cannot be read").lower()
        raise CaseError(
            Problem("FHIR bundle", f"the file could not be opened ({reason})", "", "Check name and folder")
        ) from None
    return from_bundle(data, drug=drug, products=products)


def from_bundle(text: str | bytes, *, drug: str, products: Mapping[str, str] | None = None) -> Imported:
    """FHIR R4 Bundle (JSON text) -> case file with the list of what was not understood.

    products: a person's own answer to which form a product is: its code or its text as written in the bundle
    -> a form of the drug. Raises CaseError where the text is no readable bundle or holds two patients.
    """
    bundle = _parse(text)
    if drug not in drug_names():
        raise CaseError(Problem("Drug", f'"{_clip(drug)}" was given', ", ".join(drug_names()), "Choose one of these"))
    profile = load_profile(drug)
    mapped = _checked_products(products or {}, profile)
    return _Reading(profile=profile, products=mapped).run(_entries(bundle), bundle)


# --- the text --------------------------------------------------------------------------------------------


def _too_large(size: int) -> Problem:
    return Problem(
        "FHIR bundle",
        f"{size / 1e6:,.0f} MB were given",
        f"at most {MAX_BYTES / 1e6:.0f} MB",
        "Export one patient, this drug and its levels only",
    )


def _refuse(given: str, allowed: str, fix: str) -> CaseError:
    return CaseError(Problem("FHIR bundle", given, allowed, fix))


def _pairs(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        twice = next(k for k, n in Counter(k for k, _ in pairs).items() if n > 1)
        raise _refuse(f'the key "{_clip(twice)}" stands twice in the same place', "each key once", "Export it again")
    return found


def _number(text: str) -> Decimal:
    value = Decimal(text) if len(text) <= 40 else Decimal(0)
    if len(text) > 40 or (value and not -20 <= value.adjusted() <= 20):
        raise _refuse("a number is out of all bounds", "plain numbers", "Check the export")
    return value


def _constant(word: str) -> Any:
    raise _refuse(f"{word} was given as a number", "plain numbers", "Check the export")


def _parse(text: str | bytes) -> dict[str, Any]:
    """JSON text -> object, within bounds of size, depth and numbers, and without keys given twice."""
    if len(text) > MAX_BYTES:
        raise CaseError(_too_large(len(text)))
    if isinstance(text, bytes):
        try:
            text = text.decode("utf-8-sig")
        except UnicodeDecodeError as error:
            raise _refuse(f"byte {error.start + 1} is not UTF-8 text", "UTF-8 text", "Save the file as UTF-8") from None
    deep = _refuse("the text is nested too deeply", f"at most {MAX_DEPTH} levels", "Check the export")
    try:
        raw = json.loads(
            text, object_pairs_hook=_pairs, parse_float=_number, parse_int=_number, parse_constant=_constant
        )
    except json.JSONDecodeError as error:
        raise _refuse(
            f"line {error.lineno} is not valid JSON at column {error.colno}",
            "a JSON document",
            "Check that the file is complete and is JSON, not XML",
        ) from None
    except RecursionError:
        raise deep from None
    level = [raw] if isinstance(raw, (dict, list)) else []
    for _ in range(MAX_DEPTH):
        level = [
            child
            for item in level
            for child in (item.values() if isinstance(item, dict) else item)
            if isinstance(child, (dict, list))
        ]
    if level:
        raise deep
    if not isinstance(raw, dict) or raw.get("resourceType") != "Bundle":
        kind = raw.get("resourceType") if isinstance(raw, dict) else None
        given = f"the text is a {_clip(kind)}" if isinstance(kind, str) else "the text is not a FHIR resource"
        raise _refuse(given, "a resource of type Bundle (FHIR R4, JSON)", "Export the record as a Bundle")
    return raw


@dataclass(frozen=True)
class _Entry:
    number: int
    url: str
    resource: dict[str, Any]

    @property
    def kind(self) -> str:
        return _clip(str(self.resource["resourceType"]))


def _entries(bundle: dict[str, Any]) -> list[_Entry | Line]:
    if bundle.get("type") == "history":
        raise _refuse(
            "it is a history of changes",
            "a collection, search set, document or transaction",
            "Export the present state",
        )
    listed = bundle.get("entry", [])
    if not isinstance(listed, list) or not listed:
        raise _refuse("it has no entries", "at least one entry", "Check the export")
    if len(listed) > MAX_ENTRIES:
        raise _refuse(f"{len(listed):,} entries were given", f"at most {MAX_ENTRIES:,}", "Export a shorter time")
    found: list[_Entry | Line] = []
    for number, entry in enumerate(listed, 1):
        resource = entry.get("resource") if isinstance(entry, dict) else None
        if not isinstance(resource, dict) or not isinstance(resource.get("resourceType"), str):
            found.append(Line(number, "entry", "not understood", "It holds no resource.", "Check the export."))
            continue
        url = entry.get("fullUrl")
        found.append(_Entry(number, url if isinstance(url, str) else "", resource))
    return found


# --- reading ---------------------------------------------------------------------------------------------

Model = TypeVar("Model", bound=BaseModel)


class _UnclearError(Exception):
    """Something the bundle does not say clearly; the place stays empty for a person."""


@dataclass(frozen=True)
class _Level:
    entry: int
    drawn: str
    moment: datetime | None
    kind: str
    value: str
    mg_per_L: float | None
    comment: str = ""


@dataclass(frozen=True)
class _Albumin:
    entry: int
    value: str
    taken: str
    moment: datetime


@dataclass(frozen=True)
class _Dose:
    """One administration. key: what the product is called; clear: at most the form is to be filled in."""

    entry: int
    key: str
    form: str
    start: datetime | None
    end: datetime | None
    request: str
    data: dict[str, Any]
    clear: bool


@dataclass
class _Reading:
    """One bundle while it is read."""

    profile: Profile
    products: Mapping[str, str]
    lines: list[Line] = field(default_factory=list)
    levels: list[_Level] = field(default_factory=list)
    albumins: list[_Albumin] = field(default_factory=list)
    companions: list[_Level] = field(default_factory=list)
    doses: list[_Dose] = field(default_factory=list)
    not_done: list[tuple[str, datetime]] = field(default_factory=list)
    moments: list[datetime] = field(default_factory=list)
    medications: dict[str, Concept] = field(default_factory=dict)
    into_muscle: bool = False
    line_of: dict[int, int] = field(default_factory=dict)
    albumin_times: list[float] = field(default_factory=list)

    def say(self, entry: _Entry, outcome: Outcome, said: str, fix: str = "") -> None:
        self.line_of[entry.number] = len(self.lines)
        self.lines.append(Line(entry.number, entry.kind, outcome, said, fix))

    # the bundle as a whole

    def run(self, listed: Sequence[_Entry | Line], bundle: dict[str, Any]) -> Imported:
        self.lines += [x for x in listed if isinstance(x, Line)]
        entries = [x for x in listed if isinstance(x, _Entry)]
        self._one_page(bundle)
        entries = self._once(self._one_patient(entries))
        by_kind: dict[str, list[_Entry]] = {}
        for entry in entries:
            by_kind.setdefault(entry.kind, []).append(entry)
        for entry in by_kind.pop("Medication", []):
            self._medication(entry)
        for entry in by_kind.pop("Observation", []):
            self._observation(entry)
        for entry in by_kind.pop("MedicationAdministration", []):
            self._administration(entry)
        orders = [
            found
            for kind in ("MedicationRequest", "MedicationStatement")
            for entry in by_kind.pop(kind, [])
            if (found := self._order(entry)) is not None
        ]
        patient = self._patient(by_kind.pop("Patient", []))
        for entry in by_kind.pop("Condition", []):
            self._condition(entry)
        for left in by_kind.values():
            for entry in left:
                self.say(
                    entry,
                    "not understood",
                    "This kind of resource is not read.",
                    "Add by hand what matters of it.",
                )
        return self._finish(patient, orders, len(listed))

    def _one_page(self, bundle: dict[str, Any]) -> None:
        links = bundle.get("link", [])
        if isinstance(links, list) and any(isinstance(x, dict) and x.get("relation") == "next" for x in links):
            self.lines.append(
                Line(
                    0,
                    "Bundle",
                    "check",
                    "It is one page of several: doses and levels of the other pages are missing here.",
                    "Export all pages into one bundle.",
                )
            )

    def _one_patient(self, entries: list[_Entry]) -> list[_Entry]:
        """Refuses a bundle of two patients; leaves out what does not say whose it is."""
        people = {f"Patient/{e.resource.get('id')}": e.url for e in entries if e.kind == "Patient" and e.url}
        whose: dict[int, str] = {}
        for entry in entries:
            if entry.kind == "Patient":
                own = entry.url or f"Patient/{_clip(str(entry.resource.get('id', entry.number)))}"
                whose[entry.number] = own
                continue
            subject = entry.resource.get("subject", entry.resource.get("patient"))
            reference = subject.get("reference") if isinstance(subject, dict) else None
            if isinstance(reference, str) and reference and not reference.startswith("#"):
                whose[entry.number] = _absolute(reference, entry.url, people)
        if len(set(whose.values())) > 1:
            raise _refuse(
                f"it holds data of {len(set(whose.values()))} patients, or names one in different ways",
                "one patient",
                "Export the record of one patient only",
            )
        kept = []
        for entry in entries:
            if entry.number in whose or not ("subject" in entry.resource or entry.kind in _OF_A_PATIENT):
                kept.append(entry)
            else:
                self.say(
                    entry,
                    "not understood",
                    "It does not say by a reference which patient it belongs to.",
                    "Add it by hand if it is this patient's.",
                )
        return kept

    def _once(self, entries: list[_Entry]) -> list[_Entry]:
        """Each resource once: an exact copy is left out; two contents under one id are both left out."""
        seen: dict[tuple[str, str], list[_Entry]] = {}
        for entry in entries:
            name = entry.resource.get("id")
            key = (entry.kind, f"{entry.url}|{name}" if isinstance(name, str) else f"entry {entry.number}")
            seen.setdefault(key, []).append(entry)
        kept = []
        for (kind, _), same in seen.items():
            if kind == "Patient" or len(same) == 1:
                kept += same
            elif all(x.resource == same[0].resource for x in same):
                kept.append(same[0])
                for copy in same[1:]:
                    self.say(copy, "left out", f"It is an exact copy of entry {same[0].number}.")
            else:
                numbers = ", ".join(str(x.number) for x in same)
                for x in same:
                    self.say(
                        x,
                        "not understood",
                        f"Entries {numbers} have one id and different contents; it is not said which counts.",
                        "Add the right one by hand.",
                    )
        return sorted(kept, key=lambda e: e.number)

    def _model(self, entry: _Entry, model: type[Model]) -> Model | None:
        """The resource as its model; None where its shape is wrong or it carries what changes its meaning."""
        if entry.resource.get("modifierExtension") or entry.resource.get("implicitRules"):
            self.say(
                entry,
                "not understood",
                "It carries an extension that can change its meaning.",
                "Add it by hand.",
            )
            return None
        try:
            return model.model_validate(entry.resource)
        except ValidationError as error:
            places = dict.fromkeys(place_in_words(x["loc"]) for x in error.errors(include_url=False))
            self.say(
                entry,
                "not understood",
                f"Its shape is not that of FHIR R4 at: {_clip('; '.join(places), 160)}.",
                "Add it by hand.",
            )
            return None

    def _time(self, text: str) -> tuple[str, datetime] | None:
        """A FHIR date with a time -> as the case file writes it; None where it has no time of day."""
        match = _DATE.fullmatch(text)
        if match is None or match.group(4) is None:
            return None
        year, month, day, clock, second, zone = match.groups()
        shown = f"{year}-{month}-{day} {clock}" + (f":{second}" if second not in (None, "00") else "") + zone
        try:
            moment = read_time(shown, "Time")
        except CaseError:
            return None
        self.moments.append(moment)
        return shown, moment

    # levels

    def _observation(self, entry: _Entry) -> None:
        found = self._model(entry, Observation)
        if found is None or not self._final(entry, found.status):
            return
        codes = {c.code: c for c in self.profile.codes}
        known = [(codes[c.code], c) for c in found.code.coding if c.system == LOINC and c.code in codes]
        if not known:
            self.say(
                entry,
                "not understood",
                f"{_coded(found.code)} is not among the laboratory codes that the drug file vouches for.",
                self._hint(found),
            )
            return
        code, given = known[0]
        trouble = _display_trouble(code, given.display, found.code.text)
        if len({c.code for c, _ in known}) > 1 or trouble:
            self.say(
                entry,
                "not understood",
                trouble or "It carries two codes that mean different things.",
                "Check code and name with the laboratory, and add the result by hand.",
            )
            return
        time = self._drawn(found)
        if code.measures in ("total", "free"):
            self._take_level(entry, found, code, time, given.display)
        elif code.measures == "albumin":
            self._take_albumin(entry, found, code, time)
        elif code.unit_kind == "mass":
            self._take_companion(entry, found, code, time)
        else:
            self.say(
                entry,
                "not understood",
                f"{code.display}: a share is not read.",
                "Add the free level itself, if one was measured.",
            )

    def _final(self, entry: _Entry, status: str) -> bool:
        if status in FINAL:
            return True
        if status in ("preliminary", "registered"):
            self.say(entry, "left out", f"Its status is {status}: not final.", "Add it when it is final.")
        elif status in ("cancelled", "entered-in-error"):
            self.say(entry, "left out", f"Its status is {status}.")
        else:
            self.say(
                entry,
                "not understood",
                f'Its status is "{_clip(status)}".' if status else "It has no status.",
                "Check it with the laboratory, and add it by hand.",
            )
        return False

    def _hint(self, found: Observation) -> str:
        unit = found.valueQuantity.code if found.valueQuantity else ""
        if unit in ("kg", "[lb_av]"):
            return "If it is the patient's weight, add it under patient, weight."
        if unit in ("cm", "[in_i]"):
            return "If it is the patient's height, add it under patient, height."
        return "If it matters here, add it by hand."

    def _drawn(self, found: Observation) -> tuple[str, datetime] | None:
        period = found.effectivePeriod
        text = found.effectiveDateTime or found.effectiveInstant
        if not text and period is not None and period.start == period.end:
            text = period.start
        return self._time(text)

    def _take_level(
        self, entry: _Entry, found: Observation, code: Code, time: tuple[str, datetime] | None, display: str
    ) -> None:
        value, mg_per_L, comment = "", None, ""
        try:
            value, label, note = _measured(found.valueQuantity, LEVEL_UNITS)
            if (label in MOLAR_LABELS) != (code.unit_kind == "moles"):
                raise _UnclearError(f"the code is one of {code.unit_kind}, the unit is {label}")
            if label not in self.profile.level_units:
                raise _UnclearError(f"levels of this drug are not read in {label}")
            mg_per_L = units.read(
                value.lstrip("<>"), "level", "Level", molar_mass_g_per_mol=self.profile.molar_mass_g_per_mol
            ).value
        except _UnclearError as unclear:
            value, note = "", ""
            comment = f"Entry {entry.number} of the bundle: {unclear}."
        except CaseError as error:
            value, note = "", ""
            comment = f"Entry {entry.number} of the bundle: {_clip(error.problems[0].given, 120)}."
        self.levels.append(
            _Level(
                entry.number,
                time[0] if time else "",
                time[1] if time else None,
                code.measures,
                value,
                mg_per_L,
                comment,
            )
        )
        when = f"drawn {show_time(time[1])}" if time else "without a time of day of the draw"
        said = f"{code.display}, a {code.measures} level: {value or 'no clear value'}, {when}."
        if not value:
            self.say(entry, "check", f"{said} {comment}", "Fill in the value from the laboratory report.")
        elif time is None:
            self.say(entry, "check", said, "Fill in when it was drawn; the time of the report is not used for it.")
        elif note or (display and not _same_words(display, code.display)):
            said += f' It is called "{_clip(display)}" there.' if display else ""
            self.say(entry, "check", said + (f" {note}" if note else ""), "Check it against the laboratory report.")
        else:
            self.say(entry, "read", said)

    def _take_albumin(self, entry: _Entry, found: Observation, code: Code, time: tuple[str, datetime] | None) -> None:
        try:
            value, _, note = _measured(found.valueQuantity, ALBUMIN_UNITS)
            if time is None:
                raise _UnclearError("it has no time of day")
            if value[0] in "<>":
                raise _UnclearError(f"{value} is no single value")
        except _UnclearError as unclear:
            self.say(entry, "not understood", f"{code.display}: {unclear}.", "Add it by hand under albumin.")
            return
        self.albumins.append(_Albumin(entry.number, value, *time))
        said = f"{code.display}: {value}, taken {show_time(time[1])}; the method is not stated."
        if note:
            self.say(entry, "check", f"{said} {note}", "Check it against the laboratory report.")
        else:
            self.say(entry, "read", said)

    def _take_companion(self, entry: _Entry, found: Observation, code: Code, time: tuple[str, datetime] | None) -> None:
        """The level of another drug measured with ours (it may displace it): kept with the same sample."""
        fix = "Answer the context questions, and add it to its level by hand if it is of the same sample."
        try:
            value, label, note = _measured(found.valueQuantity, LEVEL_UNITS)
            if time is None or note or value[0] in "<>" or label not in ("mg/L", "mcg/mL"):
                raise _UnclearError("time, unit or value are not clear")
        except _UnclearError as unclear:
            self.say(entry, "not understood", f"{code.display}: {unclear}.", fix)
            return
        self.companions.append(_Level(entry.number, *time, code.measures, value, None))
        self.say(entry, "check", f"{code.display}: {value}, {show_time(time[1])}.", fix)

    # doses given

    def _medication(self, entry: _Entry) -> None:
        found = self._model(entry, Medication)
        if found is not None:
            for name in (entry.url, f"Medication/{entry.resource.get('id')}"):
                if name:
                    self.medications[name] = found.code
            self.say(entry, "read", f'A product: "{found.code.words}".')

    def _product(self, entry: _Entry, found: Administration | Order) -> Concept | None:
        if found.medicationCodeableConcept is not None:
            return found.medicationCodeableConcept
        name = found.medicationReference.reference if found.medicationReference else ""
        if name.startswith("#"):
            inside = entry.resource.get("contained")
            for item in inside if isinstance(inside, list) else []:
                if isinstance(item, dict) and item.get("id") == name[1:] and item.get("resourceType") == "Medication":
                    try:
                        return Medication.model_validate(item).code
                    except ValidationError:
                        return None
        if name in self.medications:
            return self.medications[name]
        match = _named(name)
        if match and not match.group(1):
            base = _base(entry.url)
            return self.medications.get(f"{base}Medication/{match.group(3)}")
        return None

    def _ours(self, entry: _Entry, found: Administration | Order) -> tuple[Concept, str] | None:
        """The product and its form ("" where a person must say it); None, with a line, if not ours."""
        concept = self._product(entry, found)
        if concept is None:
            self.say(
                entry,
                "not understood",
                "The product it points to is not in the bundle.",
                f"If it is {self.profile.name}, add the dose by hand.",
            )
            return None
        forms = {
            self.products[name]
            for name in (concept.text, *(x for c in concept.coding for x in (c.code, c.display)))
            if name in self.products
        }
        names = " ".join([concept.text, *(c.display for c in concept.coding)]).casefold()
        listed = {(m.system, m.code): m for m in self.profile.medications}
        known = [listed[c.system, c.code] for c in concept.coding if (c.system, c.code) in listed]
        named = any(re.search(rf"\b{re.escape(n.casefold())}\b", names) for n in self.profile.names)
        if not forms and not known and not named:
            self.say(
                entry,
                "not understood",
                f'The product "{concept.words}" is not known as {self.profile.name}.',
                f"If it is {self.profile.name}, name its form (--product) and read the bundle again; "
                "if not, think of interactions.",
            )
            return None
        if not forms:
            forms = {m.form for m in known if m.form}
        return concept, forms.pop() if len(forms) == 1 else ""

    def _administration(self, entry: _Entry) -> None:
        found = self._model(entry, Administration)
        if found is None:
            return
        if found.status in ("entered-in-error", "cancelled"):
            self.say(entry, "left out", f"Its status is {found.status}.")
            return
        ours = self._ours(entry, found)
        if ours is None:
            return
        concept, form = ours
        period = found.effectivePeriod or Period()
        start = self._time(found.effectiveDateTime or period.start)
        end = self._time(period.end) if period.end else None
        if found.status == "not-done":
            if start is not None:
                self.not_done.append((_key(concept), start[1]))
            when = f" ({show_time(start[1])})" if start else ""
            self.say(entry, "left out", f"Not done{when}: {concept.words}. It does not count as given.")
            return
        if found.status not in ("completed", "in-progress", "on-hold", "stopped"):
            self.say(
                entry,
                "not understood",
                f'"{concept.words}": its status is "{_clip(found.status)}"; given or not is not said.',
                "Ask the ward, and add the dose by hand if it was given.",
            )
            return
        dosage = found.dosage or GivenDosage()
        unclear: list[str] = []
        notes: list[str] = []
        form = self._routed(form, dosage.route, unclear, notes)
        data: dict[str, Any] = {"form": form} if form else {}
        if not form:
            unclear.append(f'which form "{concept.words}" is')
        into_vein = bool(form) and "intravenous" in self.profile.forms[form].routes
        into_vein = into_vein or _route(dosage.route) == "intravenous"
        amount = self._given_amount(dosage, form, unclear, needed=found.status == "completed")
        if found.status != "completed":
            recorded = f" ({amount} is recorded as the whole)" if amount else ""
            unclear.append(f"how much went in: its status is {found.status}{recorded}")
            amount = ""
        rate = self._given_rate(dosage, unclear)
        if start is None:
            unclear.append("its date and time of day")
        if rate and not amount and into_vein and found.status == "completed":
            data.update({"rate": rate, "from": start[0] if start else "", "until": end[0] if end else ""})
            if end is None:
                unclear.append("when the infusion ended")
        else:
            data.update({"amount": amount, "at": start[0] if start else ""})
            if start and end and end[1] > start[1]:
                minutes = (end[1] - start[1]) / timedelta(minutes=1)
                if into_vein:
                    data["over"] = f"{minutes:.10g} min"
                    self._agrees(amount, rate, minutes, data, unclear)
                else:
                    notes.append(f"it is recorded over {minutes:.0f} min; the start is used")
            elif rate:
                notes.append("its rate is not used, since it has no end")
        self._keep(entry, concept, form, start, end, found, data, unclear, notes)

    def _keep(
        self,
        entry: _Entry,
        concept: Concept,
        form: str,
        start: tuple[str, datetime] | None,
        end: tuple[str, datetime] | None,
        found: Administration,
        data: dict[str, Any],
        unclear: list[str],
        notes: list[str],
    ) -> None:
        form_only = not form and len(unclear) == 1
        if form_only:
            data["comment"] = f"The bundle does not say {unclear[0]}."
        elif unclear:
            data["comment"] = f"Entry {entry.number} of the bundle does not say clearly: {'; '.join(unclear)}."
        kept = {k: v for k, v in data.items() if v}
        request = found.request.reference if found.request else ""
        self.doses.append(
            _Dose(
                entry.number,
                _key(concept),
                form,
                start[1] if start else None,
                end[1] if end else None,
                request,
                kept,
                form_only or not unclear,
            )
        )
        what = data.get("rate") or data.get("amount") or "no clear amount"
        when = show_time(start[1]) if start else "no clear time"
        said = f'Given: {what} of "{concept.words}", {when}.'
        if unclear:
            fix = "Fill in the dose line."
            if not form:
                fix = f'Fill in the dose line, or read the bundle again with --product "{_name(concept)}=FORM".'
            self.say(entry, "check", f"{said} Not clear: {'; '.join(unclear)}.", fix)
        elif notes:
            self.say(entry, "check", f"{said} Note: {'; '.join(notes)}.", "Check it against the chart.")
        else:
            self.say(entry, "read", said)

    def _routed(self, form: str, route: Concept | None, unclear: list[str], notes: list[str]) -> str:
        """The form if the route fits it; "" (and why) where the two contradict each other."""
        read = _route(route)
        if read == "intramuscular":
            self.into_muscle = True
        if route is not None and not read:
            notes.append(f'the route "{route.words}" is not read')
        if form and read:
            allowed = self.profile.forms[form].routes
            if "any" not in allowed and read not in allowed:
                unclear.append(f"the route is {read}, but {form} is given {' or '.join(allowed)}")
                return ""
        return form

    def _given_amount(self, dosage: GivenDosage, form: str, unclear: list[str], *, needed: bool) -> str:
        if dosage.dose is None:
            if needed and dosage.rateQuantity is None and dosage.rateRatio is None:
                unclear.append("the amount")
            return ""
        try:
            value, label, note = _measured(dosage.dose, AMOUNT_UNITS)
            return _amount(value, label, note, form, dosage.dose.unit + " " + dosage.text, self.profile)
        except _UnclearError as why:
            unclear.append(f"the amount ({why})")
            return ""

    def _given_rate(self, dosage: GivenDosage, unclear: list[str]) -> str:
        try:
            if dosage.rateQuantity is not None:
                return _measured(dosage.rateQuantity, RATE_UNITS)[0]
            if dosage.rateRatio is not None:
                top, label, _ = _measured(dosage.rateRatio.numerator, AMOUNT_UNITS)
                bottom, per, _ = _measured(dosage.rateRatio.denominator, PER_UNITS)
                if bottom.split()[0] != "1":
                    raise _UnclearError(f"{top} in {bottom} is not per 1 {per}")
                return f"{top.split()[0]} {label}/{per}"
        except _UnclearError as why:
            unclear.append(f"the rate ({why})")
        return ""

    def _agrees(self, amount: str, rate: str, minutes: float, data: dict[str, Any], unclear: list[str]) -> None:
        """Amount, rate and duration say one thing twice: where they differ, the amount stays empty."""
        if not amount or not rate:
            return
        per_minute = units.read(rate, "dose rate", "Rate").value / 1440
        total = units.read(amount, "amount", "Amount").value
        if abs(per_minute * minutes - total) > 0.02 * total:
            unclear.append(f"the amount: {amount} is not {rate} for {minutes:.0f} min")
            data["amount"] = ""

    # doses ordered or stated

    def _order(self, entry: _Entry) -> tuple[_Entry, _Dose] | None:
        found = self._model(entry, Order)
        if found is None:
            return None
        request = entry.kind == "MedicationRequest"
        if found.status in ("cancelled", "entered-in-error", "draft", "not-taken"):
            self.say(entry, "left out", f"Its status is {found.status}.")
            return None
        if found.doNotPerform:
            self.say(entry, "left out", "It is an order not to give something.")
            return None
        ours = self._ours(entry, found)
        if ours is None:
            return None
        concept, form = ours
        usable = ("active", "completed", "stopped", "on-hold") if request else ("active", "completed", "stopped")
        if found.status not in usable or (request and found.intent not in ORDERS):
            self.say(
                entry,
                "left out",
                f'"{concept.words}": status "{_clip(found.status)}", intent "{_clip(found.intent)}".',
                "Add it by hand if it was taken.",
            )
            return None
        instructions = found.dosageInstruction or found.dosage
        unclear: list[str] = []
        notes: list[str] = []
        data: dict[str, Any] = {"source": "ordered" if request else "stated", "confirmed": "unknown"}
        if len(instructions) == 1:
            only = instructions[0]
            form = self._routed(form, only.route, unclear, notes)
            self._schedule(only, form, data, unclear)
        else:
            only = OrderedDosage()
            unclear.append("the dose" if not instructions else "the dose: it has several parts")
        if form:
            data["form"] = form
        else:
            unclear.append(f'which form "{concept.words}" is')
        bounds = only.timing.repeat.boundsPeriod if only.timing and only.timing.repeat else None
        period = found.effectivePeriod or bounds or Period()
        start = self._time(period.start or found.effectiveDateTime)
        end = self._time(period.end)
        if start is None:
            unclear.append("when the first dose was taken")
        else:
            data["from"] = start[0]
        if period.end and end is None:
            unclear.append("when it ended")
        elif end is not None:
            data["until"] = end[0]
        elif found.status != "active":
            unclear.append(f"when it ended (its status is {found.status})")
        text = " ".join(x.text for x in instructions if x.text)
        said = f'{"Ordered" if request else "Stated"}, not given: "{concept.words}"'
        said += f', written as "{_clip(text, 120)}".' if text else "."
        if unclear:
            said += f" Not clear: {'; '.join(unclear)}."
            data["comment"] = f"Entry {entry.number} of the bundle does not say clearly: {'; '.join(unclear)}."
        if notes:
            said += f" Note: {'; '.join(notes)}."
        self.say(
            entry,
            "check",
            said,
            'Ask what was really taken; then complete the line and set "confirmed" to yes, or remove it.',
        )
        name = entry.url or f"{entry.kind}/{entry.resource.get('id')}"
        dose = _Dose(
            entry.number,
            _key(concept),
            form,
            start[1] if start else None,
            end[1] if end else None,
            name,
            data,
            not unclear,
        )
        return entry, dose

    def _schedule(self, only: OrderedDosage, form: str, data: dict[str, Any], unclear: list[str]) -> None:
        amount = ""
        try:
            if only.asNeededBoolean or only.asNeededCodeableConcept is not None:
                raise _UnclearError("it is taken as needed")
            if len(only.doseAndRate) != 1 or only.doseAndRate[0].doseQuantity is None:
                raise _UnclearError("no single amount is coded")
            quantity = only.doseAndRate[0].doseQuantity
            value, label, note = _measured(quantity, AMOUNT_UNITS)
            amount = _amount(value, label, note, form, quantity.unit + " " + only.text, self.profile)
        except _UnclearError as why:
            unclear.append(f"the amount ({why})")
        repeat = only.timing.repeat if only.timing and only.timing.repeat else None
        times = _times_of_day(repeat)
        if times:
            data["daily"] = [{"time": t, "amount": amount} for t in times]
            return
        every = _interval(repeat)
        if amount:
            data["amount"] = amount
        if every:
            data["every"] = every
        else:
            unclear.append("how often it is due")

    # the patient

    def _patient(self, entries: list[_Entry]) -> dict[str, Any]:
        data: dict[str, Any] = {}
        read = [(e, m) for e in entries if (m := self._model(e, PatientResource)) is not None]
        if not read:
            self.lines.append(
                Line(
                    0,
                    "Bundle",
                    "check",
                    "It holds no patient: age and sex are not known.",
                    "Fill them in by hand.",
                )
            )
            return data
        entry, found = read[0]
        if any((m.gender, m.birthDate) != (found.gender, found.birthDate) for _, m in read[1:]):
            self.say(
                entry,
                "check",
                "The patient stands twice, with different sex or birth date.",
                "Fill them in by hand.",
            )
            return data
        if found.gender in ("female", "male"):
            data["sex"] = found.gender
        age = self._age(found.birthDate)
        if age:
            data["age"] = age
        dropped = "Name, identifiers, address and birth date were dropped."
        said = f"Age {age or 'not known'}, sex {data.get('sex', 'not known')}. {dropped}"
        if age and "sex" in data:
            self.say(entry, "read", said)
        else:
            self.say(entry, "check", said, "Fill in by hand what is not known.")
        for other, _ in read[1:]:
            self.say(other, "left out", f"The same patient as entry {entry.number}. {dropped}")
        return data

    def _age(self, born: str) -> str:
        """Completed years (months below two) at the latest time in the bundle; "" where it cannot be told."""
        match = re.fullmatch(r"(\d{4})-(\d{2})-(\d{2})", born, re.ASCII)
        if match is None or not self.moments:
            return ""
        latest = max(self.moments, key=lambda m: m.timestamp())
        year, month, day = (int(x) for x in match.groups())
        months = (latest.year - year) * 12 + latest.month - month - (1 if latest.day < day else 0)
        if not 0 <= months <= 120 * 12 or not 1 <= month <= 12 or not 1 <= day <= 31:
            return ""
        return f"{months} months" if months < 24 else f"{months // 12} years"

    def _condition(self, entry: _Entry) -> None:
        found = self._model(entry, Condition)
        if found is None:
            return
        verified, clinical = _states(found.verificationStatus), _states(found.clinicalStatus)
        wrong = [x for x in ("entered-in-error", "refuted") if x in verified]
        if wrong:
            self.say(entry, "left out", f'The diagnosis "{found.code.words}" is marked {wrong[0]}.')
            return
        told = [x for x in (*clinical, *verified) if x]
        told += [f"since {_clip(found.onsetDateTime, 10)}"] if found.onsetDateTime else []
        told += [f"recorded {_clip(found.recordedDate, 10)}"] if found.recordedDate else []
        words = " ".join((found.code.text, *(c.display for c in found.code.coding))).casefold()
        asked = [q.words for q in self.profile.questions.values() if any(x in words for x in q.diagnoses)]
        state = f" ({_clip(', '.join(told))})" if told else ""
        bears = f" It may bear on: {' '.join(asked)}" if asked else ""
        self.say(
            entry,
            "not understood",
            f'The diagnosis "{found.code.words}"{state} is shown, not read '
            f"into an answer: no code of a diagnosis could be verified.{bears}",
            "Answer the context questions by hand.",
        )

    # the case

    def _finish(self, patient: dict[str, Any], orders: list[tuple[_Entry, _Dose]], total: int) -> Imported:
        lines = self._given_lines()
        lines += self._ordered_lines(orders)
        levels = self._level_rows()
        data: dict[str, Any] = {
            "pkcalc_case": 1,
            "comment": f"Read from a FHIR bundle of {total} entries. Check it against the chart.",
            "drug": self.profile.id,
        }
        if patient:
            data["patient"] = patient
        if self.albumins:
            data["albumin"] = _albumin_data(max(self.albumins, key=lambda a: a.moment.timestamp()))
        if self.into_muscle:
            data["context"] = {"im_route": "yes"}
        if lines:
            data["doses"] = lines
        if levels:
            data["levels"] = levels
        file = parse_case_text(json.dumps(data))
        problems: tuple[Problem, ...] = ()
        try:
            check_case(file)
        except CaseError as error:
            problems = error.problems
        undated = [
            Problem(f"Level {i}, drawn", "no time of the draw is known", "date and time", "Fill it in")
            for i, row in enumerate(levels, 1)
            if not row.get("drawn")
        ]
        if not levels:
            undated.append(Problem("Levels", "the bundle holds no level that could be read", "a level", "Add it"))
        if not lines:
            undated.append(Problem("Doses", "the bundle holds no dose that could be read", "a dose line", "Add it"))
        advice = (
            "Not in a bundle, to be added by hand: weight, the context questions, who gave the doses, the time "
            "of the consult.",
        )
        listed = tuple(sorted(self.lines, key=lambda x: x.entry))
        return Imported(file, listed, problems + tuple(undated), advice)

    def _level_rows(self) -> list[dict[str, Any]]:
        """Each sample once: copies are left out, contradictions stay empty; albumin: the nearest."""
        rows: list[dict[str, Any]] = []
        groups: dict[tuple[str, str], list[_Level]] = {}
        for level in self.levels:
            moment = level.moment.timestamp() if level.moment else f"entry {level.entry}"
            groups.setdefault((level.kind, str(moment)), []).append(level)
        dated = sorted(groups.values(), key=lambda g: g[0].moment.timestamp() if g[0].moment else 0.0)
        for same in dated:
            first = same[0]
            value, comment = first.value, first.comment
            known = [x for x in same if x.mg_per_L is not None]
            numbers = ", ".join(str(x.entry) for x in same)
            if len(same) > 1 and len(known) == len(same) and _one_value(known):
                for copy in same[1:]:
                    self._mark(copy.entry, "left out", f"The same sample as entry {first.entry}, reported again.")
            elif len(same) > 1:
                value = ""
                told = ", ".join(x.value or "no clear value" for x in same)
                comment = f"Entries {numbers} of the bundle contradict each other: {told}."
                for x in same:
                    self._mark(x.entry, "check", f"One sample, different values: {told} (entries {numbers}).")
            row: dict[str, Any] = {"value": value, "kind": first.kind}
            if first.drawn:
                row["drawn"] = first.drawn
            if comment:
                row["comment"] = comment
            if first.moment is not None:
                self._with_sample(row, first)
            rows.append(row)
        return rows

    def _with_sample(self, row: dict[str, Any], level: _Level) -> None:
        assert level.moment is not None
        if self.profile.binding is not None and self.albumins:
            near = self._nearest_albumin(level.moment)
            hours = abs(days_between(level.moment, near.moment)) * 24
            if hours <= self.profile.binding.albumin_oldest_h:
                row["albumin"] = _albumin_data(near)
            else:
                self._mark(
                    level.entry,
                    "check",
                    f"No albumin within {self.profile.binding.albumin_oldest_h:.0f} h of it: "
                    "the latest one of the case would be used for it.",
                )
        for drug in self.profile.other_levels:
            same = [x for x in self.companions if x.moment == level.moment and x.kind == drug]
            if len(same) == 1:
                row.setdefault("other_levels", {})[drug] = same[0].value

    def _nearest_albumin(self, moment: datetime) -> _Albumin:
        if not self.albumin_times:
            self.albumins.sort(key=lambda a: a.moment.timestamp())
            self.albumin_times = [a.moment.timestamp() for a in self.albumins]
        at = bisect_left(self.albumin_times, moment.timestamp())
        around = self.albumins[max(at - 1, 0) : at + 1]
        return min(around, key=lambda a: abs(a.moment - moment))

    def _mark(self, number: int, outcome: Outcome, said: str) -> None:
        """Changes the outcome of an entry's line, adding why."""
        at = self.line_of[number]
        line = self.lines[at]
        source = "laboratory report" if line.resource == "Observation" else "chart"
        fix = f"Check it against the {source}."
        kept = (line.fix or fix) if outcome == "check" else ""
        self.lines[at] = Line(number, line.resource, outcome, f"{line.said} {said}", kept)

    def _given_lines(self) -> list[dict[str, Any]]:
        doses = self._reconciled()
        clear = [d for d in doses if d.clear and "at" in d.data and d.start is not None]
        taken = {d.entry for d in clear}
        rest = [d for d in doses if d.entry not in taken]
        found: list[tuple[float, dict[str, Any]]] = []
        streams: dict[tuple[str, str, str, str], list[_Dose]] = {}
        for dose in clear:
            key = (dose.key, dose.form, dose.data["amount"], dose.data.get("over", ""))
            streams.setdefault(key, []).append(dose)
        for stream in streams.values():
            stream.sort(key=_stamp)
            skipped = [m for key, m in self.not_done if key == stream[0].key]
            for run, interval, missed in _runs(stream, skipped):
                found.append((_stamp(run[0]), _run_line(run, interval, missed)))
        found += [(_stamp(d), d.data) for d in rest]
        found.sort(key=lambda x: x[0])
        return [data for _, data in found]

    def _reconciled(self) -> list[_Dose]:
        """One administration counts once; two contents for one moment stay empty for a person."""
        kept: list[_Dose] = []
        groups: dict[tuple[str, str], list[_Dose]] = {}
        for dose in self.doses:
            moment = str(_stamp(dose)) if dose.start else f"entry {dose.entry}"
            groups.setdefault((dose.key, moment), []).append(dose)
        for same in groups.values():
            first = same[0]
            numbers = ", ".join(str(x.entry) for x in same)
            if len(same) > 1 and all(x.data == first.data for x in same) and first.clear:
                kept.append(first)
                for copy in same[1:]:
                    self._mark(
                        copy.entry,
                        "check",
                        f"The same product, amount and time as entry {first.entry}: counted once. "
                        "If both were given, add the second dose.",
                    )
            elif len(same) > 1:
                amounts = ", ".join(x.data.get("amount") or x.data.get("rate") or "no clear amount" for x in same)
                told = f"entries {numbers} stand at the same time with different contents: {amounts}"
                data = {k: v for k, v in first.data.items() if k in ("form", "at")}
                data["comment"] = f"In the bundle {told}. Fill in what was given in all."
                kept.append(
                    _Dose(first.entry, first.key, first.form, first.start, first.end, first.request, data, False)
                )
                for x in same:
                    self._mark(x.entry, "check", f"Not clear: {told}.")
            else:
                kept.append(first)
        return kept

    def _ordered_lines(self, orders: list[tuple[_Entry, _Dose]]) -> list[dict[str, Any]]:
        kept: list[tuple[_Entry, _Dose]] = []
        by_name: dict[str, list[_Dose]] = {}
        for dose in self.doses:
            for name in {f"key {dose.key}", f"form {dose.form}", f"order {_plain_name(dose.request)}"}:
                by_name.setdefault(name, []).append(dose)
        for entry, order in orders:
            same = by_name.get(f"key {order.key}", [])
            if order.form:
                same = same + by_name.get(f"form {order.form}", [])
            given = any(_within(d, order) for d in same)
            given = given or f"order {_plain_name(order.request)}" in by_name
            if given:
                self._mark(
                    entry.number,
                    "left out",
                    "Administrations of it stand in the bundle: these count, the order does not.",
                )
                continue
            kept.append((entry, order))
        for a, b in pairwise(kept):
            if _same_product(a[1], b[1]):
                self._mark(
                    b[0].number,
                    "check",
                    f"It may be the same as entry {a[0].number}: confirm only one of the two.",
                )
        if self.doses and kept:
            self.lines.append(
                Line(
                    0,
                    "Bundle",
                    "check",
                    "Beside administrations there are orders or statements of other products or times.",
                    "Confirm none of them unless it was taken in addition.",
                )
            )
        return [order.data for _, order in kept]


_OF_A_PATIENT = (
    "Observation",
    "MedicationAdministration",
    "MedicationRequest",
    "MedicationStatement",
    "Condition",
)


def _states(concept: Concept | None) -> tuple[str, ...]:
    """The codes of a status, as written."""
    if concept is None:
        return ()
    return tuple(_clip(c.code, 20) for c in concept.coding if c.code) or (
        (_clip(concept.text, 20),) if concept.text else ()
    )


# --- small readings --------------------------------------------------------------------------------------


def _clip(text: str, most: int = 80) -> str:
    clean = "".join(c if c.isprintable() else " " for c in text).strip()
    return clean if len(clean) <= most else clean[:most] + "..."


def _same_words(a: str, b: str) -> bool:
    return a.casefold().split() == b.casefold().split()


def _named(reference: str) -> re.Match[str] | None:
    """A reference by base, kind and id; None where it has another shape."""
    return _RESTFUL.fullmatch(reference) if len(reference) <= MAX_REFERENCE else None


def _base(url: str) -> str:
    match = _named(url)
    return match.group(1) or "" if match else ""


def _absolute(reference: str, url: str, people: Mapping[str, str]) -> str:
    """A reference as the one name of its patient."""
    match = _named(reference)
    if match is None:
        return reference
    base, name = match.group(1) or "", f"{match.group(2)}/{match.group(3)}"
    if base:
        return base + name
    own = _base(url)
    if own and own + name in people.values():
        return own + name
    return people.get(name) or own + name


def _key(concept: Concept) -> str:
    codes = sorted(f"{c.system}|{c.code}" for c in concept.coding if c.code)
    return codes[0] if codes else " ".join(concept.words.casefold().split())


def _coded(concept: Concept) -> str:
    """A concept by its words and its codes."""
    codes = ", ".join(c.code for c in concept.coding if c.code)
    return f'"{concept.words}"' + (f" (code {_clip(codes, 40)})" if codes else "")


def _name(concept: Concept) -> str:
    """What --product takes for a product: its first code, else its text."""
    return _clip(next((c.code for c in concept.coding if c.code), "") or concept.words)


def _route(route: Concept | None) -> str:
    if route is None:
        return ""
    words = [route.text, *(c.display for c in route.coding)]
    read = {ROUTES[key] for w in words if (key := " ".join(w.casefold().split())) in ROUTES}
    return read.pop() if len(read) == 1 else ""


def _measured(quantity: Quantity | None, table: Mapping[str, str]) -> tuple[str, str, str]:
    """(number with our label, the label, a note); _UnclearError where it is not exactly readable."""
    if quantity is None or quantity.value is None:
        raise _UnclearError("no value is coded")
    if quantity.value < 0:
        raise _UnclearError("the value is negative")
    if quantity.comparator not in ("", "<", ">"):
        raise _UnclearError(f'the value is marked "{_clip(quantity.comparator, 10)}"')
    unit, note = quantity.code, ""
    if unit and quantity.system != UCUM:
        raise _UnclearError(f'the unit "{_clip(unit, 20)}" is not coded in UCUM')
    if not unit:
        unit, note = quantity.unit, "Its unit stands in words only."
    if unit not in table:
        given = f"{_clip(format(quantity.value, 'f'), 30)} {_clip(unit, 20)}".strip()
        raise _UnclearError(
            f'{given}: the unit "{_clip(unit, 20)}" is not read' if unit else f"{given}: no unit is given"
        )
    if quantity.code and quantity.unit in table and table[quantity.unit] != table[unit]:
        label = table[unit]
        same = {table[quantity.unit], label} == {"mg/L", "mcg/mL"}
        if not same:
            raise _UnclearError(f"the unit is coded {unit} and written {quantity.unit}")
    return f"{quantity.comparator}{format(quantity.value, 'f')} {table[unit]}", table[unit], note


def _amount(value: str, label: str, note: str, form: str, words: str, profile: Profile) -> str:
    """An amount in the unit of its form; "of what" must be said where the form counts equivalents."""
    if value[0] in "<>":
        raise _UnclearError(f"{value} is no single amount")
    equivalents = bool(_EQUIVALENTS.search(words))
    wanted = profile.forms[form].amount_unit if form else "mg"
    if form and wanted == "mg PE" and not equivalents:
        raise _UnclearError(f"{value} of salt or of equivalents (PE) is not said")
    if equivalents and form and wanted != "mg PE":
        raise _UnclearError(f"{value} PE is said, but {form} does not count in PE")
    if equivalents and label != "mg":
        raise _UnclearError(f"{value} PE")
    return f"{value} PE" if equivalents else value


def _display_trouble(code: Code, display: str, text: str) -> str:
    """Why a name contradicts its code; "" where it does not."""
    pinned = code.display.casefold()
    free = ("free", "unbound", "non-protein")
    for words in (display.casefold(), text.casefold()):
        if not words:
            continue
        if words == display.casefold() and pinned.split()[0] not in words:
            return f'Its code is that of "{code.display}", its name is "{_clip(display)}".'
        if any(w in words for w in free) != any(w in pinned for w in free) and (
            any(w in words for w in free) or words == display.casefold()
        ):
            return f'Its code is that of "{code.display}", its name is "{_clip(display or text)}".'
        if any(w in words for w in ("urine", "saliva", "cerebral", "csf", "ratio")) and code.unit_kind != "share":
            return f'Its code is that of "{code.display}", its name is "{_clip(display or text)}".'
    return ""


def _times_of_day(repeat: Repeat | None) -> list[str]:
    if repeat is None or not repeat.timeOfDay or not _plain(repeat):
        return []
    if repeat.period != 1 or repeat.periodUnit != "d":
        return []
    if repeat.frequency is not None and repeat.frequency != len(repeat.timeOfDay):
        return []
    times = [re.fullmatch(r"(\d{2}:\d{2}):00", t, re.ASCII) for t in repeat.timeOfDay]
    return [t.group(1) for t in times if t] if all(times) and len(times) <= 24 else []


def _plain(repeat: Repeat) -> bool:
    return not (
        repeat.frequencyMax is not None
        or repeat.periodMax is not None
        or repeat.count is not None
        or repeat.dayOfWeek
        or repeat.when
    )


def _interval(repeat: Repeat | None) -> str:
    """'12 h' where an order repeats at an even interval; "" where it does not say so plainly."""
    if repeat is None or not _plain(repeat) or repeat.timeOfDay:
        return ""
    hours = {"h": 1, "d": 24, "wk": 168}.get(repeat.periodUnit)
    if hours is None or not repeat.period or not repeat.frequency:
        return ""
    interval = float(repeat.period * hours / repeat.frequency)
    return f"{interval:g} h" if float(f"{interval:g}") == interval else ""


def _albumin_data(found: _Albumin) -> dict[str, Any]:
    return {"value": found.value, "taken": found.taken}


def _one_value(levels: Sequence[_Level]) -> bool:
    values = [x.mg_per_L for x in levels if x.mg_per_L is not None]
    marks = {x.value[0] if x.value[0] in "<>" else "" for x in levels}
    return len(marks) == 1 and max(values) - min(values) <= SAME_LEVEL * max(values)


def _stamp(dose: _Dose) -> float:
    return dose.start.timestamp() if dose.start else 0.0


def _same_product(a: _Dose, b: _Dose) -> bool:
    return a.key == b.key or bool(a.form and a.form == b.form)


def _within(given: _Dose, order: _Dose) -> bool:
    """True where an administration lies, or may lie, in the time of an order."""
    if given.start is None or order.start is None:
        return True
    day = timedelta(days=1)
    return order.start - day <= given.start and (order.end is None or given.start <= order.end + day)


def _plain_name(reference: str) -> str:
    """Kind and id of a reference, whatever stands before them."""
    match = _named(reference)
    return f"{match.group(2)}/{match.group(3)}" if match else reference


def _runs(
    stream: Sequence[_Dose], skipped: Iterable[datetime]
) -> list[tuple[list[_Dose], timedelta | None, list[datetime]]]:
    """Doses of one product and amount, split into runs at exactly even intervals (a dose not done inside a
    run is kept as missed) and single doses (interval None)."""
    not_done = {m.timestamp(): m for m in skipped}
    found: list[tuple[list[_Dose], timedelta | None, list[datetime]]] = []
    i = 0
    while i < len(stream):
        run, missed, interval = [stream[i]], [], None
        if i + 1 < len(stream):
            interval = _gap(stream[i], stream[i + 1])
            if not timedelta(hours=1) <= interval <= timedelta(hours=168) or interval % timedelta(minutes=30):
                interval = None
        j = i + 1
        while interval is not None and j < len(stream):
            gap = _gap(run[-1], stream[j])
            steps, off = divmod(gap, interval)
            before = run[-1].start
            assert before is not None
            between = [not_done.get((before + k * interval).timestamp()) for k in range(1, min(steps, 200))]
            if off or steps < 1 or steps > 200 or any(m is None for m in between):
                break
            missed += [m for m in between if m is not None]
            run.append(stream[j])
            j += 1
        if len(run) >= FEWEST_IN_A_RUN:
            found.append((run, interval, missed))
            i = j
        else:
            found.append(([stream[i]], None, []))
            i += 1
    return found


def _gap(a: _Dose, b: _Dose) -> timedelta:
    assert a.start is not None
    assert b.start is not None
    return b.start - a.start


def _run_line(run: Sequence[_Dose], interval: timedelta | None, missed: Sequence[datetime]) -> dict[str, Any]:
    first = dict(run[0].data)
    if interval is None:
        return first
    start = first.pop("at")
    last = run[-1].start
    assert last is not None
    hours = interval / timedelta(hours=1)
    line = {**first, "every": f"{hours:g} h", "from": start, "until": _written(last + timedelta(minutes=1))}
    line["comment"] = (f"{first['comment']} " if "comment" in first else "") + (
        f"{len(run)} administrations of the bundle, the last at {_written(last)}. If it goes on, leave until empty."
    )
    if missed:
        line["missed"] = [_written(m) for m in missed]
    return line


def _written(moment: datetime) -> str:
    text = moment.isoformat(sep=" ", timespec="seconds" if moment.second else "minutes")
    return text.replace("+00:00", "Z") if moment.utcoffset() == timedelta(0) else text


def _checked_products(products: Mapping[str, str], profile: Profile) -> dict[str, str]:
    problems = [
        Problem(
            f'Product "{_clip(name)}"',
            f'the form "{_clip(form)}" was given',
            ", ".join(profile.forms),
            "Choose one",
        )
        for name, form in products.items()
        if form not in profile.forms
    ]
    if problems:
        raise CaseError(problems)
    return dict(products)


__all__ = ["Imported", "Line", "from_bundle", "load_bundle"]
