"""The workings as a reader with a calculator meets them: every result follows from the numbers printed before it."""

from __future__ import annotations

import ast
import math
import operator
import re
from collections.abc import Callable
from functools import cache

import pytest

from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration
from pkcalc.note import populations
from pkcalc.note.document import Document, compose
from pkcalc.note.front import spoken_for
from pkcalc.note.workings import REPRESENTATIVE, machine_only, workings
from pkcalc.units import show_number
from tests.unit import cases

NAMES = ("clean-pair", "low-albumin", "load-and-top-up", "change-of-salt", "over-the-ceiling", "toxic-level", "child")

UNITS = [
    "mg",
    "PE/day",
    "mg/kg/day",
    "mg/day",
    "mg/L",
    "L/day",
    "L/kg",
    "g/dL",
    "mg",
    "PE",
    "mg/h",
    "mL/h",
    "kg",
    "mg",
    "mL",
    "g",
    "L",
    "days",
    "day",
    "h",
    "%",
]  # longest first, so that none is cut by another
UNITS = ["mg PE/day", "mg PE", *[u for u in UNITS if u not in ("PE/day", "PE")]]
UNIT = "|".join(re.escape(u) for u in sorted(set(UNITS), key=len, reverse=True))
NUMBER = re.compile(rf"(?<![\w.])(\d[\d,]*(?:\.\d+)?)(?: (?:{UNIT})(?![\w/]))?")

OPERATORS: dict[type, Callable[[float, float], float]] = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: operator.mul,
    ast.Div: operator.truediv,
    ast.Pow: operator.pow,
}
FUNCTIONS: dict[str, Callable[[float], float]] = {"ln": math.log, "sqrt": math.sqrt}


def calculate(text: str) -> float:
    """A printed expression on a pocket calculator: units left away, x for times, ^ for powers."""
    plain = NUMBER.sub(lambda m: m.group(1).replace(",", ""), text)
    plain = plain.replace(" x ", " * ").replace("^", "**")

    def value(node: ast.expr) -> float:
        if isinstance(node, ast.Constant) and isinstance(node.value, (int, float)):
            return float(node.value)
        if isinstance(node, ast.BinOp):
            return OPERATORS[type(node.op)](value(node.left), value(node.right))
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub):
            return -value(node.operand)
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            return FUNCTIONS[node.func.id](value(node.args[0]))
        raise AssertionError(f"not a calculator's expression: {text}")

    return value(ast.parse(plain, mode="eval").body)


@cache
def consult_of(name: str) -> Consult:
    return run_consult(demonstration(name))


def printed_steps(document: Document) -> list[tuple[str, str, str]]:
    """(line, numbers, result) of every line of the workings with an equation in it."""
    found = []
    for section in document.sections:
        if section.title == "Workings":
            for line in section.lines:
                parts = line.split(" = ")
                if line.startswith("   ") and len(parts) >= 2:
                    numbers = parts[-2].split(": ")[-1]
                    found.append((line.strip(), numbers, parts[-1]))
    return found


def half_of_last_digit(text: str) -> float:
    digits = text.replace(",", "")
    return 0.5 * 10.0 ** -len(digits.partition(".")[2])


@pytest.mark.parametrize("name", NAMES)
def test_every_printed_result_follows_from_the_printed_numbers(name: str) -> None:
    steps = printed_steps(compose(consult_of(name)))
    assert len(steps) >= 4
    for line, numbers, result in steps:
        shown = re.match(r"(minus )?([\d,]+(?:\.\d+)?)", result)
        assert shown is not None, line
        ours = calculate(numbers)
        value = float(shown.group(2).replace(",", "")) * (-1 if shown.group(1) else 1)
        allowed = half_of_last_digit(shown.group(2))
        assert abs(ours - value) <= allowed * 1.000001, line


def test_the_calculator_itself() -> None:
    assert calculate("300 mg x 0.92 x 1 / 1 day") == pytest.approx(276)
    assert calculate("(1,200 mg PE + 300 mg) / 2 days") == pytest.approx(750)
    assert calculate("455 mg/day x (35 kg / 70 kg)^0.6") == pytest.approx(455 * 0.5**0.6)
    assert calculate("(ln(20 mg/L / 8 mg/L)) / (0.2 x sqrt(2))") == pytest.approx(math.log(2.5) / 0.2 / math.sqrt(2))
    assert calculate("5.1 g/dL - 0.1") == pytest.approx(5.0)


@pytest.mark.parametrize("name", ["clean-pair", "low-albumin", "child"])
def test_the_representative_pair_gives_the_printed_central_forecast(name: str) -> None:
    consult = consult_of(name)
    found, shown = workings(consult), spoken_for(consult)
    assert found.representative is not None
    assert shown is not None
    vmax, km = found.representative
    rate = shown.rate_mg_per_day
    level = km.value * rate / (vmax.value - rate)
    assert show_number(level) == show_number(shown.forecast.steady.median)
    text = " ".join(x for s in compose(consult).sections if s.title == "Workings" for x in s.lines)
    assert f"Representative pair, central: Vmax {vmax} of active drug, Km {km}." in text
    assert f"{REPRESENTATIVE}." in text


def test_a_forecast_without_a_steady_state_has_no_representative_pair() -> None:
    data = cases.plain(
        proposed=[{"form": "extended-capsule", "amount": "500 mg", "every": "24 h"}],
        doses=cases.doses("300 mg", "350 mg"),
    )
    consult = run_consult(data)
    assert workings(consult).representative is None
    assert any("no steady state, because its R = 460 mg/day" in x for x in workings(consult).said)


def test_what_only_the_machine_can_reproduce_is_said() -> None:
    lines = machine_only(consult_of("clean-pair"))
    assert lines[0].startswith("Only the machine can reproduce: every median, 90 % interval and chance")
    assert "its derivation" in lines[1]
    assert "representative pair above is labelled so because it reproduces" in lines[2]


def test_the_one_level_check_holds_km_and_says_where_it_lands() -> None:
    groups = dict(workings(consult_of("clean-pair")).groups)
    first, second = groups["One-level check, Km fixed"]
    assert first.what == "Vmax from Level 2, Km held at the population's median"
    assert first.numbers == "331.2 mg/day x (5 mg/L + 11.2 mg/L) / 11.2 mg/L"
    assert str(first.result) == "479.06 mg/day"
    assert second.remark == "inside the 90 % interval of the central forecast"


def test_weighing_again_is_as_good_as_estimating_anew() -> None:
    from pkcalc.cautions import State
    from pkcalc.consult import level_data, record_spread
    from pkcalc.estimate import posterior

    consult = consult_of("child")
    assert consult.prior is not None
    assert consult.chosen is not None
    assert consult.record is not None
    others = [x for x in populations.populations_compared(consult) if x[0] != consult.prior.population]
    consult = consult_of("clean-pair")
    assert consult.prior is not None
    assert consult.chosen is not None
    assert consult.record is not None
    others += [x for x in populations.populations_compared(consult) if x[0] != consult.prior.population]
    assert len(others) >= 3
    state = State(consult.case, consult.profile, consult.site, observations=consult.observations)
    name, _, again = others[-1]
    anew = posterior.from_record(
        consult.record,
        level_data(state),
        consult.profile.populations[name].at(70.0, 45.0, height_cm=168.0, sex="female"),
        record_spread(consult.case, consult.profile),
    )
    for key, band in again.summary.items():
        other = anew.summary[key]
        for ours, theirs in zip((band.low, band.median, band.high), (other.low, other.median, other.high), strict=True):
            assert ours == pytest.approx(theirs, rel=0.02), key
