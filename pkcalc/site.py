"""The hospital's own settings: one TOML file for one drug, checked like a drug file.

A local protocol wins over our defaults, never over a physical impossibility or a boxed-warning rate. Every
setting taken from the file is kept with what it replaces, so that the note can print it as "local setting".
"""

from __future__ import annotations

import difflib
import hashlib
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cache
from importlib import resources
from pathlib import Path
from typing import Any

from pkcalc import units
from pkcalc.drugs.profile import Binding, Population, Profile, RateCap, drug_names, load_profile
from pkcalc.drugs.table import Fact, Table
from pkcalc.errors import CaseError, Problem
from pkcalc.units import show, show_number

MAX_BYTES = 100_000
_GROUPS = {"adult": "adults", "child": "children", "risk": "elderly or heart disease"}
DAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")


@dataclass(frozen=True)
class LocalSetting:
    """One setting of the site file, as shown in the note: what, the local value, and what it replaces."""

    path: str
    value: str
    instead_of: str

    @property
    def text(self) -> str:
        return f"{self.path}: {self.value} (local setting, instead of {self.instead_of})"


@dataclass(frozen=True)
class Site:
    """The settings in force. None or empty: not set here, the drug's own value counts.

    drug: the drug the file was written for, "" without a file. population: a named population, or "" for the
    default. chances and loss weights always have a value. settings: what the file changed.
    """

    name: str
    protocol: str
    file: str
    sha256: str
    drug: str
    target_low_mg_per_L: float | None
    target_high_mg_per_L: float | None
    aim_mg_per_L: float | None
    critical_mg_per_L: float | None
    laboratory_unit: str
    quantification_limit_mg_per_L: float | None
    assay_cv: float | None
    draw_days: tuple[str, ...]
    total_cv: Mapping[str, float]
    correction: str
    largest_step_mg_per_day: float | None
    largest_daily_mg_per_day: float | None
    largest_single_load_mg: float | None
    rate_caps_mg_per_min: Mapping[tuple[str, str], float]
    rate_caps_mg_per_kg_min: Mapping[tuple[str, str], float]
    shelf: str
    products: tuple[str, ...]
    added_products: tuple[str, ...]
    alternate_days: bool
    population: str
    warn_chance: float
    stop_chance: float
    loss_too_high: float
    loss_too_low: float
    session_timeout_min: float
    settings: tuple[LocalSetting, ...]

    def _same_drug(self, profile: Profile) -> None:
        if self.drug and self.drug != profile.id:
            raise CaseError(
                Problem(
                    "Site file",
                    f"{self.file} is written for {self.drug}, the case is about {profile.id}",
                    f"a site file for {profile.id}",
                    "Leave the site file out or choose the right one",
                )
            )

    def target(self, profile: Profile) -> tuple[float, float, str]:
        """The target range on the working basis, and where it comes from."""
        self._same_drug(profile)
        low, high = profile.target.low_mg_per_L, profile.target.high_mg_per_L
        if self.target_low_mg_per_L is None and self.target_high_mg_per_L is None:
            return low, high, "usual range"
        return (
            self.target_low_mg_per_L or low,
            self.target_high_mg_per_L or high,
            f"local setting, {self.file}",
        )

    def critical(self, profile: Profile) -> float:
        """The critical level on the working basis."""
        self._same_drug(profile)
        return self.critical_mg_per_L or profile.target.critical_mg_per_L

    def level_total_cv(self, who: str) -> float | None:
        """Total spread of a level for observed, outpatient or doubtful doses; None where not set here."""
        return self.total_cv.get(who)

    def albumin_coefficient(self, binding: Binding) -> float:
        """The albumin coefficient of the correction in use [dL/g]."""
        for alternative in binding.alternatives:
            if alternative.id == self.correction:
                return alternative.coefficient_dL_per_g
        return binding.albumin_coefficient

    def population_for(self, profile: Profile, age_years: float | None) -> Population:
        """The site's population where it describes this age, else the drug's default."""
        if self.population:
            chosen = profile.populations[self.population]
            low, high = chosen.ages_years
            if age_years is None or low <= age_years < high:
                return chosen
        return profile.default_population(age_years)

    def rate_cap(self, profile: Profile, form: str, group: str) -> RateCap | None:
        """The fastest infusion of a form for adults, children or patients at risk; None: no such cap."""
        caps = profile.loading.rate_caps if profile.loading else ()
        for cap in caps:
            if cap.form == form and cap.group == group:
                key = (form, group)
                flat = self.rate_caps_mg_per_min.get(key, cap.mg_per_min)
                scaled = self.rate_caps_mg_per_kg_min.get(key, cap.mg_per_kg_min)
                if (flat, scaled) == (cap.mg_per_min, cap.mg_per_kg_min):
                    return cap
                unit = profile.forms[form].amount_unit
                words = f"at most {show(flat, f'{unit}/min')}"
                if scaled is not None:
                    words = f"at most {show(scaled, f'{unit}/kg/min')}, never above {show(flat, f'{unit}/min')}"
                return RateCap(
                    form,
                    group,
                    f"{_GROUPS[group]}: {words} (local setting)",
                    flat,
                    scaled,
                    cap.highest_mg_per_min,
                    cap.highest_mg_per_kg_min,
                )
        return None


@cache
def default_facts() -> Mapping[str, Fact]:
    """Our own defaults for the service, with their derivation."""
    text = resources.files("pkcalc").joinpath("site.toml").read_text(encoding="utf-8")
    facts: dict[str, Fact] = {}
    top = Table("site.toml", "", tomllib.loads(text), facts)
    chance, loss, form = top.table("chance"), top.table("loss"), top.table("form")
    chance.share("warn")
    chance.share("stop")
    loss.number("too_high", "ratio")
    loss.number("too_low", "ratio")
    form.number("session_timeout", "duration")
    for table in (chance, loss, form, top):
        table.done()
    return facts


def _default(path: str) -> float:
    value = default_facts()[path].value
    assert isinstance(value, float)
    return value


@cache
def no_site() -> Site:
    """The settings without a site file."""
    return Site(
        name="",
        protocol="",
        file="",
        sha256="",
        drug="",
        target_low_mg_per_L=None,
        target_high_mg_per_L=None,
        aim_mg_per_L=None,
        critical_mg_per_L=None,
        laboratory_unit="",
        quantification_limit_mg_per_L=None,
        assay_cv=None,
        draw_days=DAYS,
        total_cv={},
        correction="",
        largest_step_mg_per_day=None,
        largest_daily_mg_per_day=None,
        largest_single_load_mg=None,
        rate_caps_mg_per_min={},
        rate_caps_mg_per_kg_min={},
        shelf="",
        products=(),
        added_products=(),
        alternate_days=False,
        population="",
        warn_chance=_default("chance.warn"),
        stop_chance=_default("chance.stop"),
        loss_too_high=_default("loss.too_high"),
        loss_too_low=_default("loss.too_low"),
        session_timeout_min=_default("form.session_timeout"),
        settings=(),
    )


def load_site(path: str | Path) -> Site:
    """A site file, checked against its drug's profile; every problem is reported at once."""
    file = Path(path)
    try:
        raw = file.read_bytes()
    except OSError:
        raise CaseError(
            Problem(
                "Site file",
                f"{file.name} could not be read",
                "a readable TOML file",
                "Check its name and folder",
            )
        ) from None
    if len(raw) > MAX_BYTES:
        raise CaseError(
            Problem("Site file", f"{file.name} has {len(raw):,} bytes", f"up to {MAX_BYTES:,}", "Shorten the file")
        )
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError:
        raise CaseError(
            Problem("Site file", f"{file.name} is not UTF-8 text", "a TOML file in UTF-8", "Save it as UTF-8")
        ) from None
    return parse_site(text, file.name)


def _written(value: Any) -> str:
    """A value as it stands in the file, for a message."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return f"{value:g}"
    return f'"{value[:40]}"' if isinstance(value, str) else "a list or section"


@dataclass
class _Reader:
    """Reads the settings of one file, collecting problems instead of stopping at the first."""

    file: str
    data: dict[str, Any]
    profile: Profile
    problems: list[Problem] = field(default_factory=list)
    settings: list[LocalSetting] = field(default_factory=list)
    asked: dict[str, set[str]] = field(default_factory=dict)

    def raw(self, section: str, key: str) -> Any:
        self.asked.setdefault(section, set()).add(key)
        table = self.data.get(section, {})
        return table.get(key) if isinstance(table, dict) else None

    def say(self, section: str, key: str, given: str, allowed: str, fix: str) -> None:
        where = f"{self.file}, {section}.{key}" if key else f"{self.file}, {section}"
        self.problems.append(Problem(where, given, allowed, fix))

    def _text(self, section: str, key: str) -> str | None:
        value = self.raw(section, key)
        if value is None:
            return None
        if not isinstance(value, str) or not value.strip() or len(value) > 200:
            self.say(section, key, "not a text", 'a text in quotation marks, such as "10 mg/L"', "Write it so")
            return None
        return value.strip()

    def _keep(self, section: str, key: str, value: str, instead_of: str) -> None:
        words = f"{section} {key}".replace("_", " ")
        self.settings.append(LocalSetting(words, value, instead_of))

    def quantity(
        self, section: str, key: str, kind: str, allowed: tuple[float, float], instead_of: str
    ) -> float | None:
        """A number with its unit, within what is possible (both ends included)."""
        text = self._text(section, key)
        if text is None:
            return None
        mass = self.profile.molar_mass_g_per_mol if kind == "level" else None
        try:
            typed = units.read(text, kind, f"{self.file}, {section}.{key}", molar_mass_g_per_mol=mass)
        except CaseError as error:
            self.problems.extend(error.problems)
            return None
        value, (low, high) = typed.value, allowed
        if not low <= value <= high:
            ends = [units.in_label(x, kind, typed.label, molar_mass_g_per_mol=mass) for x in allowed]
            span = f"{show_number(ends[0])} to {show(ends[1], typed.label)}"
            self.say(section, key, f"{text} was given", span, "Check the number and its unit")
            return None
        self._keep(section, key, text, instead_of)
        return value

    def number(self, section: str, key: str, allowed: tuple[float, float], instead_of: str) -> float | None:
        """A bare number."""
        value = self.raw(section, key)
        if value is None:
            return None
        low, high = allowed
        if isinstance(value, bool) or not isinstance(value, int | float) or not low <= value <= high:
            self.say(
                section,
                key,
                f"{_written(value)} was given",
                f"a number from {show_number(low)} to {show_number(high)}",
                "Mend it",
            )
            return None
        self._keep(section, key, show_number(float(value)), instead_of)
        return float(value)

    def choice(self, section: str, key: str, allowed: tuple[str, ...], instead_of: str) -> str:
        text = self._text(section, key)
        if text is None:
            return ""
        if text not in allowed:
            near = difflib.get_close_matches(text, allowed, n=1, cutoff=0.4)
            fix = f'Did you mean "{near[0]}"?' if near else "Choose one of these"
            self.say(section, key, f'"{text}" was given', ", ".join(allowed), fix)
            return ""
        self._keep(section, key, text, instead_of)
        return text

    def several(self, section: str, key: str, allowed: tuple[str, ...], instead_of: str) -> tuple[str, ...]:
        value = self.raw(section, key)
        if value is None:
            return ()
        if not isinstance(value, list) or not value or not all(isinstance(v, str) for v in value):
            self.say(section, key, "not a list of texts", ", ".join(allowed), 'Write ["...", "..."]')
            return ()
        unknown = [v for v in value if v not in allowed]
        if unknown or len(set(value)) != len(value):
            given = f'"{unknown[0]}" was given' if unknown else "one of them stands twice"
            self.say(section, key, given, ", ".join(allowed), "Choose from these, each once")
            return ()
        self._keep(section, key, ", ".join(value), instead_of)
        return tuple(value)

    def switch(self, section: str, key: str, default: bool) -> bool:
        value = self.raw(section, key)
        if value is None:
            return default
        if not isinstance(value, bool):
            self.say(section, key, f"{_written(value)} was given", "true or false", "Write one of the two")
            return default
        self._keep(section, key, "yes" if value else "no", "yes" if default else "no")
        return value

    def leftovers(self) -> None:
        for section, table in self.data.items():
            if section not in self.asked:
                self.say(section, "", "an unknown section", ", ".join(self.asked), "Take it out or mend its name")
            elif not isinstance(table, dict):
                self.say(section, "", "not a section", f"[{section}] with settings below it", "Write it so")
            else:
                for key in table:
                    if key not in self.asked[section]:
                        known = ", ".join(sorted(self.asked[section]))
                        self.say(section, key, "an unknown setting", known, "Take it out or mend its name")


def parse_site(text: str, file: str) -> Site:
    """The settings of one TOML text."""
    try:
        data = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        reason = str(error) if isinstance(error, tomllib.TOMLDecodeError) else "too deeply nested"
        raise CaseError(
            Problem("Site file", f"{file} is not valid TOML ({reason})", "a TOML file", "Mend it there")
        ) from None
    head = data.get("site")
    drug = head.get("drug") if isinstance(head, dict) else None
    if not isinstance(drug, str):
        raise CaseError(
            Problem(f"{file}, site.drug", "missing", ", ".join(drug_names()), "Name the drug the settings are for")
        )
    profile = load_profile(drug)
    r = _Reader(file, data, profile)
    r.raw("site", "drug")
    name, protocol = r._text("site", "name"), r._text("site", "protocol")
    for key, value in (("name", name), ("protocol", protocol)):
        if value is None and not r.problems:
            r.say("site", key, "missing", "the name of the service and of its protocol with a date", "Add it")
    site = _settings(r, name or "", protocol or "", hashlib.sha256(text.encode()).hexdigest())
    r.leftovers()
    if r.problems:
        raise CaseError(r.problems)
    return site


def _settings(r: _Reader, name: str, protocol: str, sha256: str) -> Site:
    profile, usual, base = r.profile, r.profile.target, no_site()
    gate = profile.level_gate_mg_per_L("total")
    level: Callable[[float], str] = lambda x: show(x, "mg/L")  # noqa: E731 - one word for one line
    low = r.quantity("target", "low", "level", gate, level(usual.low_mg_per_L))
    high = r.quantity("target", "high", "level", gate, level(usual.high_mg_per_L))
    aim = r.quantity("target", "aim", "level", gate, level(usual.aim_mg_per_L))
    critical = r.quantity("target", "critical", "level", gate, level(usual.critical_mg_per_L))
    order = (low or usual.low_mg_per_L, high or usual.high_mg_per_L, critical or usual.critical_mg_per_L)
    if not (order[0] < order[1] <= order[2]):
        given = f"low {level(order[0])}, high {level(order[1])}, critical {level(order[2])}"
        r.say("target", "", given, "low below high, high not above critical", "Mend the order")
    elif not order[0] <= (aim or (order[0] + order[1]) / 2) <= order[1]:
        r.say(
            "target",
            "aim",
            f"{level(aim or 0)} was given",
            f"{level(order[0])} to {level(order[1])}",
            "Mend it",
        )
    spread = profile.spread
    cvs: dict[str, float] = {}
    for who, usual_cv in spread.total_cv.items():
        value = r.quantity("spread", who, "share", (0.02, 1.0), show(usual_cv * 100, "%"))
        if value is not None:
            cvs[who] = value
    assay = r.quantity("laboratory", "assay_cv", "share", (0.005, 0.5), show(spread.assay_cv * 100, "%"))
    corrections = tuple(a.id for a in profile.binding.alternatives) if profile.binding else ()
    flat, scaled = _rates(r)
    limits, loading = profile.limits, profile.loading
    most = max((f.largest_dose_mg for f in profile.forms.values()), default=0.0)
    daily = limits.largest_mg_per_day if limits else 0.0
    shelf = r.choice("products", "shelf", tuple(profile.shelves), "no shelf")
    on_shelf = profile.shelves[shelf].products if shelf else tuple(profile.products)
    products = r.several("products", "only", on_shelf, "the whole shelf")
    others = tuple(p for p in profile.products if not shelf or p not in on_shelf)
    added = r.several("products", "add", others, "nothing more")
    if added and not shelf:
        r.say("products", "add", "products without a shelf were given", "a shelf first", "Name the shelf above it")
    stocked = (*(products or (on_shelf if shelf else ())), *added)
    groups = [profile.products[p].exclusive_group for p in stocked if profile.products[p].exclusive_group]
    if len(groups) != len(set(groups)):
        key = "add" if added else "only"
        r.say("products", key, "two strengths of the same liquid", "one of them", "Take one of them out")
    warn = r.quantity("chance", "warn", "share", (0.001, 0.5), show(base.warn_chance * 100, "%"))
    stop = r.quantity("chance", "stop", "share", (0.001, 0.5), show(base.stop_chance * 100, "%"))
    warn, stop = warn or base.warn_chance, stop or base.stop_chance
    if warn > stop:
        r.say(
            "chance",
            "warn",
            f"{show(warn * 100, '%')} was given",
            f"not above the stop, {show(stop * 100, '%')}",
            "Mend one of the two",
        )
    return Site(
        name=name,
        protocol=protocol,
        file=r.file,
        sha256=sha256,
        drug=profile.id,
        target_low_mg_per_L=low,
        target_high_mg_per_L=high,
        aim_mg_per_L=aim,
        critical_mg_per_L=critical,
        laboratory_unit=r.choice("laboratory", "unit", profile.level_units, "none preselected"),
        quantification_limit_mg_per_L=r.quantity(
            "laboratory", "quantification_limit", "level", (0.01, gate[1]), "not stated"
        ),
        assay_cv=assay,
        draw_days=r.several("laboratory", "draw_days", DAYS, "every day") or DAYS,
        total_cv=cvs,
        correction=r.choice("binding", "correction", ("default", *corrections), "default"),
        largest_step_mg_per_day=r.quantity(
            "limits", "largest_step", "dose rate", (1.0, daily), "the published step rule"
        ),
        largest_daily_mg_per_day=r.quantity(
            "limits", "largest_daily", "dose rate", (1.0, 3 * daily), show(daily, "mg/day")
        ),
        largest_single_load_mg=r.quantity(
            "limits",
            "largest_single_load",
            "amount",
            (1.0, most),
            show(loading.largest_single_mg, "mg") if loading else "none",
        ),
        rate_caps_mg_per_min=flat,
        rate_caps_mg_per_kg_min=scaled,
        shelf=shelf,
        products=products,
        added_products=added,
        alternate_days=r.switch("products", "alternate_days", False),
        population=r.choice("population", "name", tuple(profile.populations), "default"),
        warn_chance=warn,
        stop_chance=stop,
        loss_too_high=r.number("loss", "too_high", (1.0, 100.0), show_number(base.loss_too_high)) or base.loss_too_high,
        loss_too_low=r.number("loss", "too_low", (0.01, 100.0), show_number(base.loss_too_low)) or base.loss_too_low,
        session_timeout_min=(
            1440 * timeout
            if (
                timeout := r.quantity(
                    "form",
                    "session_timeout",
                    "duration",
                    (1 / 1440, 0.5),
                    show(base.session_timeout_min, "min"),
                )
            )
            else base.session_timeout_min
        ),
        settings=tuple(r.settings),
    )


def _rates(r: _Reader) -> tuple[dict[tuple[str, str], float], dict[tuple[str, str], float]]:
    """Infusion caps by form and group: slower than ours freely, faster only up to the published maximum."""
    flat: dict[tuple[str, str], float] = {}
    scaled: dict[tuple[str, str], float] = {}
    caps = r.profile.loading.rate_caps if r.profile.loading else ()
    r.asked.setdefault("rates", set())
    for cap in caps:
        unit = f"{r.profile.forms[cap.form].amount_unit}/min"
        key = f"{cap.form}-{cap.group}"
        value = r.quantity(
            "rates",
            key,
            "dose rate",
            (144.0, cap.highest_mg_per_min * 1440),
            show(cap.mg_per_min, unit),
        )
        if value is not None:
            flat[cap.form, cap.group] = value / 1440
        if cap.mg_per_kg_min is not None and cap.highest_mg_per_kg_min is not None:
            per_kg = r.quantity(
                "rates",
                f"{key}-per-kg",
                "dose rate per weight",
                (14.4, cap.highest_mg_per_kg_min * 1440),
                show(cap.mg_per_kg_min, unit.replace("/min", "/kg/min")),
            )
            if per_kg is not None:
                scaled[cap.form, cap.group] = per_kg / 1440
    return flat, scaled
