"""Units at the door: the only file that imports pint.

Free text never reaches pint's parser: a label must stand in the closed list `LABELS`, a number must pass the
strict reader `read_number`. Inside, everything is a plain float in the canonical unit of its kind.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from decimal import ROUND_HALF_UP, Decimal
from functools import cache
from typing import Any

import pint

from pkcalc.errors import CaseError, Problem, as_typed

ureg: Any = pint.UnitRegistry(None, cache_folder=None)
for _line in (
    "kilogram = [mass] = kg",
    "gram = 1e-3 kilogram = g",
    "milligram = 1e-6 kilogram = mg",
    "microgram = 1e-9 kilogram = mcg",
    "pound = 0.45359237 kilogram = lb",
    "metre = [length] = m",
    "centimetre = 0.01 metre = cm",
    "inch = 0.0254 metre = inch",
    "litre = [volume] = L",
    "decilitre = 0.1 litre = dL",
    "millilitre = 0.001 litre = mL",
    "day = [time] = day",
    "hour = day / 24 = h",
    "minute = hour / 60 = min",
    "week = 7 day",
    "month = 30.4375 day",
    "year = 365.25 day",
    "mole = [substance] = mol",
    "millimole = 1e-3 mole = mmol",
    "micromole = 1e-6 mole = umol",
):
    ureg.define(_line)

Quantity = pint.Quantity

#: label as written -> (kind, factor to the canonical unit of that kind, expression for pint)
#: Factors of molar labels are per mmol or umol and need the molar mass.
LABELS: dict[str, tuple[str, float, str]] = {
    "mg/L": ("level", 1.0, "mg/L"),
    "mcg/mL": ("level", 1.0, "mcg/mL"),
    "mg/dL": ("level", 10.0, "mg/dL"),
    "g/L": ("level", 1000.0, "g/L"),
    "umol/L": ("level", 1e-3, "umol/L"),
    "mmol/L": ("level", 1.0, "mmol/L"),
    "kg": ("weight", 1.0, "kg"),
    "lb": ("weight", 0.45359237, "lb"),
    "cm": ("height", 1.0, "cm"),
    "in": ("height", 2.54, "inch"),
    "mg": ("amount", 1.0, "mg"),
    "g": ("amount", 1000.0, "g"),
    "mg PE": ("amount", 1.0, "mg"),
    "mg/day": ("dose rate", 1.0, "mg/day"),
    "g/day": ("dose rate", 1000.0, "g/day"),
    "mg/h": ("dose rate", 24.0, "mg/h"),
    "g/h": ("dose rate", 24000.0, "g/h"),
    "mg/min": ("dose rate", 1440.0, "mg/min"),
    "mg PE/day": ("dose rate", 1.0, "mg/day"),
    "mg PE/min": ("dose rate", 1440.0, "mg/min"),
    "mg/kg": ("amount per weight", 1.0, "mg/kg"),
    "mg PE/kg": ("amount per weight", 1.0, "mg/kg"),
    "mg/kg/day": ("dose rate per weight", 1.0, "mg/kg/day"),
    "mg/kg/h": ("dose rate per weight", 24.0, "mg/kg/h"),
    "mg/kg/min": ("dose rate per weight", 1440.0, "mg/kg/min"),
    "mg PE/kg/min": ("dose rate per weight", 1440.0, "mg/kg/min"),
    "L": ("volume", 1.0, "L"),
    "mL": ("volume", 1e-3, "mL"),
    "L/kg": ("volume per weight", 1.0, "L/kg"),
    "mL/min": ("clearance", 1.44, "mL/min"),
    "L/h": ("clearance", 24.0, "L/h"),
    "L/day": ("clearance", 1.0, "L/day"),
    "day": ("duration", 1.0, "day"),
    "days": ("duration", 1.0, "day"),
    "h": ("duration", 1 / 24, "h"),
    "min": ("duration", 1 / 1440, "min"),
    "week": ("duration", 7.0, "week"),
    "weeks": ("duration", 7.0, "week"),
    "month": ("duration", 30.4375, "month"),
    "months": ("duration", 30.4375, "month"),
    "year": ("duration", 365.25, "year"),
    "years": ("duration", 365.25, "year"),
    "per h": ("rate constant", 24.0, "1/h"),
    "per day": ("rate constant", 1.0, "1/day"),
    "%": ("share", 0.01, ""),
}

#: Kinds that share labels with another kind but have a canonical unit of their own.
ALBUMIN = {"g/L": 1.0, "g/dL": 10.0}
AGE = {"years": 1.0, "year": 1.0, "months": 1 / 12, "month": 1 / 12, "weeks": 7 / 365.25, "week": 7 / 365.25}
FACTORS: dict[str, dict[str, float]] = {"albumin": ALBUMIN, "age": AGE}
for _label, (_kind, _factor, _) in LABELS.items():
    FACTORS.setdefault(_kind, {})[_label] = _factor

#: The canonical unit of each kind, as printed.
CANONICAL = {
    "level": "mg/L",
    "albumin": "g/L",
    "age": "years",
    "weight": "kg",
    "height": "cm",
    "amount": "mg",
    "dose rate": "mg/day",
    "amount per weight": "mg/kg",
    "dose rate per weight": "mg/kg/day",
    "volume": "L",
    "volume per weight": "L/kg",
    "clearance": "L/day",
    "duration": "days",
    "rate constant": "per day",
    "share": "",
}
MOLAR = {"umol/L", "mmol/L"}

_NUMBER = re.compile(r"[0-9]+(?:\.[0-9]+)?|\.[0-9]+")
_COMMA = re.compile(r"([0-9]{1,3}(?:,[0-9]{3})+)(\.[0-9]+)?")
_EXPONENT = re.compile(r"[eE][+-]?[0-9]")


@dataclass(frozen=True)
class Typed:
    """A number as typed, with its value in the canonical unit of its kind."""

    text: str
    value: float
    label: str = ""


def Q(value: Any, unit: str) -> Any:
    """A quantity: `Q(300, "mg/day")`. The unit must be one of the closed list of labels."""
    return ureg.Quantity(value, unit_of(unit))


@cache
def unit_of(label: str) -> Any:
    """The pint unit of a label of the closed list (also "g/dL"); anything else is refused."""
    if label == "g/dL":
        return ureg.parse_units("g/dL")
    if label not in LABELS:
        raise CaseError(_unknown_label("Unit", label, sorted(LABELS)))
    return ureg.parse_units(LABELS[label][2])


def _unknown_label(where: str, label: str, allowed: list[str]) -> Problem:
    near = [known for known in allowed if known.lower() == label.lower()]
    fix = f'Write "{near[0]}": capital and small letters matter' if near else "Give one of these units"
    micro = label.replace("\u00b5", "u").replace("\u03bc", "u")
    if micro != label:
        plain = {"umol/L": "umol/L", "ug/mL": "mcg/mL"}.get(micro)
        fix = f'Write "{plain}": the Greek letter is misread' if plain in allowed else fix
    given = f'the unit "{as_typed(label)}" was given' if label else "no unit was given"
    return Problem(where, given, " or ".join(allowed), fix)


def read_number(text: str, where: str = "Number") -> float:
    """A plain positive decimal number: digits, at most one point, thousands commas where unambiguous.

    Refuses signs, exponents, underscores, "nan", "inf", and a comma that may be a decimal comma.
    """
    stripped = text.strip()
    given = f'"{as_typed(text)}" was given'
    allowed = "a plain number such as 12.5 or 1250"
    if not stripped:
        raise CaseError(Problem(where, "nothing was given", allowed, "Enter the number"))
    if len(stripped) > 24:
        raise CaseError(Problem(where, given, allowed, "Enter the number with fewer digits"))
    if _NUMBER.fullmatch(stripped) and stripped.isascii():
        return float(stripped)
    if "," in stripped:
        if _COMMA.fullmatch(stripped) and stripped.isascii() and ("." in stripped or stripped.count(",") > 1):
            return float(stripped.replace(",", ""))
        fix = "A comma can be a decimal point or a thousands mark: write 12.5 or 12500 without a comma"
        raise CaseError(Problem(where, given, allowed, fix))
    if stripped.startswith(("-", "\u2212")):
        raise CaseError(Problem(where, given, "a number of 0 or more", "Check the number: it cannot be negative"))
    if stripped.startswith("+"):
        raise CaseError(Problem(where, given, allowed, "Leave out the plus sign"))
    raise CaseError(Problem(where, given, allowed, "Use digits and one decimal point only"))


def split_label(text: str) -> tuple[str, str]:
    """'29 g/L' -> ('29', 'g/L'); '8mg/L' -> ('8', 'mg/L')."""
    match = re.match(r"\s*([0-9.,]*)\s*(.*?)\s*$", text, re.DOTALL)
    assert match is not None
    number, label = match.group(1), match.group(2)
    if not number or _EXPONENT.match(label) or (label and not label[0].isalpha() and label[0] != "%"):
        head, _, tail = text.strip().partition(" ")
        return head, tail.strip()
    return number, label


def read(
    text: str,
    kind: str,
    where: str,
    *,
    molar_mass_g_per_mol: float | None = None,
    only: tuple[str, ...] | None = None,
    zero_allowed: bool = False,
) -> Typed:
    """Number and unit as typed -> value in the canonical unit of `kind`.

    kind: a key of CANONICAL. only: restricts the labels (a site's laboratory unit, say).
    molar_mass_g_per_mol: needed for umol/L and mmol/L.
    """
    allowed = [x for x in FACTORS[kind] if only is None or x in only]
    if molar_mass_g_per_mol is None:
        allowed = [x for x in allowed if x not in MOLAR]
    if not text.strip():
        raise CaseError(
            Problem(where, "nothing was given", "a number with " + " or ".join(allowed), "Enter number and unit")
        )
    if len(text) > 200:
        raise CaseError(
            Problem(where, f'"{as_typed(text)}" was given', "a number with " + " or ".join(allowed), "Shorten it")
        )
    number, label = split_label(text)
    if not number[:1].isdigit() and text.strip() in FACTORS[kind]:
        raise CaseError(
            Problem(
                where,
                f'"{as_typed(text)}" was given without a number',
                "a number with " + " or ".join(allowed),
                "Enter the number",
            )
        )
    value = read_number(number, where)
    if label not in allowed:
        if label in MOLAR and kind == "level" and molar_mass_g_per_mol is None:
            problem = Problem(
                where,
                f'"{as_typed(text)}" was given, but no molar mass is known here',
                " or ".join(allowed),
                "Convert the level to mg/L first",
            )
            raise CaseError(problem)
        raise CaseError(_unknown_label(where, label, allowed))
    if value == 0 and not zero_allowed:
        raise CaseError(Problem(where, f'"{as_typed(text)}" was given', "a number above 0", "Check the number"))
    factor = FACTORS[kind][label]
    if label in MOLAR:
        assert molar_mass_g_per_mol is not None
        factor *= molar_mass_g_per_mol
    return Typed(text=text.strip(), value=_decimal(value * factor), label=label)


def _decimal(value: float) -> float:
    """A typed decimal stays the decimal it was: 1.005 g is 1005 mg, not 1004.9999999999999."""
    return float(f"{value:.15g}")


def in_label(value: float, kind: str, label: str, *, molar_mass_g_per_mol: float | None = None) -> float:
    """A canonical value expressed in another label of its kind (for a laboratory's own unit)."""
    factor = FACTORS[kind][label]
    if label in MOLAR:
        if molar_mass_g_per_mol is None:
            raise CaseError(Problem("Unit", f'"{label}" without a molar mass', "mg/L", "Use mg/L"))
        factor *= molar_mass_g_per_mol
    return value / factor


def to_canonical(quantity: Any, kind: str, name: str) -> Any:
    """A pint quantity (scalar or array) -> float or array in the canonical unit of `kind`.

    Bare numbers and wrong dimensions are refused with the way to mend it.
    """
    canonical = CANONICAL[kind]
    if not isinstance(quantity, ureg.Quantity):
        example = {"dose rate": "300 mg/day", "level": "8 mg/L", "duration": "10 days", "volume": "49 L"}.get(
            kind, f"1 {canonical}"
        )
        given = "nothing" if quantity is None else f'the bare value "{as_typed(str(quantity))}"'
        raise CaseError(Problem(name, f"{given} was given", f"a quantity in {canonical}", f"Attach a unit: {example}"))
    unit = unit_of("day" if kind == "duration" else canonical)
    if not quantity.check(unit.dimensionality):
        raise CaseError(
            Problem(name, f"a quantity in {quantity.units} was given", f"a quantity in {canonical}", "Check the unit")
        )
    return quantity.to(unit).magnitude


def show_number(value: float, digits: int = 3) -> str:
    """A number for screen and paper: `digits` significant digits, halves away from zero as on paper, leading zero, no
    trailing zero, comma from 1,000, never an exponent."""
    if value != value or value in (float("inf"), float("-inf")):
        raise ValueError("only finite numbers are shown")
    # the number as it is written, not the binary fraction behind it: 1.005 is a half, and 0.1 x 3 is 0.3
    written = Decimal(f"{value:.15g}")
    if written == 0:
        return "0"
    out = f"{written.quantize(Decimal(1).scaleb(written.adjusted() + 1 - digits), ROUND_HALF_UP):,f}"
    return out.rstrip("0").rstrip(".") if "." in out else out


def show_dose(value: float) -> str:
    """The amount of a dose, every digit that was typed: '1,234.5'. A dose is never rounded on screen."""
    return show_number(value, 12)


def show(value: float, label: str, digits: int = 3) -> str:
    """Number and unit for screen and paper: '0.5 mg/L', '1,250 mg'."""
    text = show_number(value, digits)
    return f"{text} {label}" if label else text


def show_up_to(value: float, label: str, most: float) -> str:
    """The same, and 'above 60 mg/L' for a value beyond the most that is told in numbers."""
    return f"above {show(most, label)}" if value > most else show(value, label)


def percent(share: float) -> str:
    """A chance in words that never read as impossible or certain."""
    if share < 0.01:
        return "less than 1 %"
    if share > 0.99:
        return "more than 99 %"
    return f"{show_number(100 * share, 2)} %"


def percent_beside(share: float, limit: float) -> str:
    """A chance with as many digits as it takes to tell it from the limit that it is held against."""
    text, bound = percent(share), percent(limit)
    if text != bound or share == limit:
        return text
    for digits in range(3, 7):
        text = f"{show_number(100 * share, digits)} %"
        if text != bound:
            return text
    return f"just {'above' if share > limit else 'below'} {bound}"
