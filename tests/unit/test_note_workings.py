"""The workings as a reader with a calculator meets them: every result follows from the numbers printed before it."""

from __future__ import annotations

import ast
import math
import operator
import re
import sys
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from typing import Any

import pytest

from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration, demonstrations
from pkcalc.note import populations
from pkcalc.note import workings as module
from pkcalc.note.document import Document, compose
from pkcalc.note.front import spoken_for
from pkcalc.note.workings import FULLY_TAKEN, REPRESENTATIVE, Step, machine_only, workings
from pkcalc.units import show_number
from tests.unit import cases

#: A line that no demonstration prints: free levels.
EXTRA = {
    "free levels": cases.plain(
        levels=[
            {"value": "0.8 mg/L", "kind": "free", "drawn": "2026-09-15 07:00"},
            {"value": "2 mg/L", "kind": "free", "drawn": "2026-12-01 07:00"},
        ],
        proposed=[{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}],
    ),
}
HEADINGS = [
    f"{x}."
    for x in (
        *("Active drug", "Levels at normal binding", "Population at this patient", "Two levels"),
        *(REPRESENTATIVE, FULLY_TAKEN, "One-level check, Km fixed", "Load"),
    )
]
#: Between them they print every kind of line; the other demonstrations follow in the long part.
QUICK = ("clean-pair", "low-albumin", "load-and-top-up", "ethanol-dialysis", *EXTRA)
NAMES = (
    *QUICK,
    *(pytest.param(d.name, marks=pytest.mark.slow) for d in demonstrations() if d.name not in QUICK),
)

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
    "mg/mL",
    "mg/kg/h",
    "g/h",
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
    return evaluate(parsed(text))


def parsed(text: str) -> ast.expr:
    plain = NUMBER.sub(lambda m: m.group(1).replace(",", ""), text)
    return ast.parse(plain.replace(" x ", " * ").replace("^", "**"), mode="eval").body


def evaluate(node: ast.expr) -> float:
    if isinstance(node, ast.Constant) and isinstance(node.value, (int, float)):
        return float(node.value)
    if isinstance(node, ast.BinOp):
        return OPERATORS[type(node.op)](evaluate(node.left), evaluate(node.right))
    if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub):
        return -evaluate(node.operand)
    if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
        return FUNCTIONS[node.func.id](evaluate(node.args[0]))
    raise AssertionError(f"not a calculator's expression: {ast.unparse(node)}")


@cache
def consult_of(name: str) -> Consult:
    return run_consult(EXTRA[name] if name in EXTRA else demonstration(name))


@cache
def document_of(name: str) -> Document:
    return compose(consult_of(name))


@dataclass(frozen=True)
class Printed:
    """One line of the workings as it stands on paper: name of the result, equation in letters, numbers, result."""

    line: str
    group: str
    name: str
    equation: str
    numbers: str
    result: str

    @property
    def value(self) -> float:
        return read(self.result)

    @property
    def holds(self) -> bool:
        """The result is what the printed numbers give, to half of its last digit."""
        digits = re.sub(r"[^\d.]", "", first_number(self.result))
        allowed = 0.5 * 10.0 ** -len(digits.partition(".")[2])
        return abs(calculate(self.numbers) - self.value) <= allowed * 1.000001


def first_number(result: str) -> str:
    found = re.match(r"(minus )?[\d,]+(?:\.\d+)?", result)
    assert found is not None, result
    return found.group()


def read(result: str) -> float:
    text = first_number(result)
    return float(text.removeprefix("minus ").replace(",", "")) * (-1 if text.startswith("minus ") else 1)


def printed_steps(document: Document) -> list[Printed]:
    """Every line of the workings with an equation in it; any other line within a group is a fault."""
    found, group = [], ""
    lines = [x for section in document.sections if section.title == "Workings" for x in section.lines]
    for line in lines:
        if not line.startswith("   "):
            group = line if line in HEADINGS else group
            continue
        what, rest = line.strip().split(": ", 1)
        *name, equation, numbers, result = rest.split(" = ")
        assert len(name) <= 1, line
        found.append(Printed(line.strip(), group, name[0] if name else what, equation, numbers, result))
    return found


@pytest.mark.parametrize("name", NAMES)
def test_every_printed_result_follows_from_the_printed_numbers(name: str) -> None:
    steps = printed_steps(document_of(name))
    assert steps or consult_of(name).stopped
    for step in steps:
        assert step.holds, step.line


@pytest.mark.parametrize("name", NAMES)
def test_every_equation_in_letters_is_the_one_that_is_worked(name: str) -> None:
    """Each letter stands for one number within its line, and for the latest result of that name in its group."""
    results: dict[tuple[str, str], float] = {}
    for step in printed_steps(document_of(name)):
        bound = letters_of(step.equation, step.numbers)
        for letter, value in bound.items():
            known = results.get((step.group, letter), value)
            assert value == pytest.approx(known, rel=1e-12), f"{letter} in {step.line}"
        results[step.group, step.name] = step.value


def letters_of(equation: str, numbers: str) -> dict[str, float]:
    """What each name of an equation stands for in its numbers; an AssertionError where the two are not one equation."""
    names: list[str] = []

    def hide(part: str) -> str:
        bare = part.strip()
        if not bare or bare in ("ln", "sqrt") or re.fullmatch(r"\d+(\.\d+)?", bare):
            return part
        if bare not in names:
            names.append(bare)
        return part.replace(bare, f"v{names.index(bare)}")

    parts = re.split(r"( x | / | \+ | - |\^|\(|\))", equation)
    tree = ast.parse("".join(x if i % 2 else hide(x) for i, x in enumerate(parts)).replace(" x ", " * ").replace("^", "**"), mode="eval").body  # fmt: skip
    bound: dict[str, float] = {}
    if equation.startswith("amounts x ") and numbers.startswith("("):
        # several doses in one cycle: each is amount x salt factor x share, and the letters stand for many numbers
        inside, _, days = numbers.rpartition(" / ")
        for one in inside.strip("()").split(" + "):
            letters_of(equation, f"{one} / {days}")
        return {}

    def match(letters: ast.expr, worked: ast.expr) -> None:
        if isinstance(letters, ast.Name):
            value, key = evaluate(worked), names[int(letters.id[1:])]
            assert bound.setdefault(key, value) == value, f"{key} has two values in {numbers}"
        elif isinstance(letters, ast.Constant) and isinstance(worked, ast.Constant):
            assert letters.value == worked.value, f"{equation} is not {numbers}"
        elif isinstance(letters, ast.BinOp) and isinstance(worked, ast.BinOp):
            assert type(letters.op) is type(worked.op), f"{equation} is not {numbers}"
            match(letters.left, worked.left)
            match(letters.right, worked.right)
        elif isinstance(letters, ast.Call) and isinstance(worked, ast.Call):
            assert ast.dump(letters.func) == ast.dump(worked.func), f"{equation} is not {numbers}"
            match(letters.args[0], worked.args[0])
        else:
            raise AssertionError(f"{equation} is not {numbers}")

    match(tree, parsed(numbers))
    return bound


def is_worked(equation: str, numbers: str) -> bool:
    try:
        letters_of(equation, numbers)
    except AssertionError:
        return False
    return True


def other_digit(digit: str) -> str:
    return "1" if digit == "9" else str(int(digit) + 1)


@pytest.mark.parametrize("name", NAMES)
def test_a_changed_digit_is_noticed_in_every_equation(name: str) -> None:
    """Every digit of every result, and the leading digit of every number that enters it."""
    for step in printed_steps(document_of(name)):
        shown = first_number(step.result)
        for i, sign in enumerate(shown):
            if sign.isdigit():
                changed = shown[:i] + other_digit(sign) + shown[i + 1 :]
                assert not replace(step, result=changed).holds, f"{changed} in {step.line}"
        for found in NUMBER.finditer(step.numbers):
            i = found.start()
            changed = step.numbers[:i] + other_digit(step.numbers[i]) + step.numbers[i + 1 :]
            if calculate(changed) == calculate(step.numbers):
                # a number that changes nothing: the exponent of a ratio of 1
                assert step.numbers[i - 1] == "^", step.line
                continue
            assert not replace(step, numbers=changed).holds or not is_worked(step.equation, changed), (
                f"{changed} in {step.line}"
            )


@pytest.mark.parametrize("name", NAMES)
def test_numbers_in_the_remarks_stand_elsewhere_in_the_note(name: str) -> None:
    document = document_of(name)
    elsewhere = " ".join(
        text
        for s in (*document.front, *document.sections)
        if s.title != "Workings"
        for text in (*s.lines, *(cell for row in (s.table.rows if s.table else ()) for cell in row))
    )
    for step in printed_steps(document):
        remark = step.result.partition(" (")[2]
        for kind in ("median printed: ", "as ordered after rounding and limits: ", "median of all draws: "):
            if remark.startswith(kind):
                number = first_number(remark.removeprefix(kind).removeprefix("above "))
                assert re.search(rf"(?<![\d.]){re.escape(number)}(?![\d])", elsewhere), step.line


@pytest.mark.parametrize("name", NAMES)
def test_the_pair_that_is_labelled_is_the_pair_that_is_worked(name: str) -> None:
    lines = [x for s in document_of(name).sections if s.title == "Workings" for x in s.lines]
    steps = printed_steps(document_of(name))
    for line in lines:
        said = re.match(
            r"Representative pair, (central|every dose taken): Vmax (\S+) \S+ of active drug, Km (\S+) ", line
        )
        if said is not None:
            group = REPRESENTATIVE if said.group(1) == "central" else FULLY_TAKEN
            worked = [letters_of(s.equation, s.numbers) for s in steps if s.group == f"{group}."]
            assert worked
            for key, text in (("Vmax", said.group(2)), ("Km", said.group(3))):
                values = {b[key] for b in worked if key in b}
                assert values == {float(text.replace(",", ""))}, line


@pytest.mark.parametrize("name", ["ethanol-dialysis", pytest.param("ethanol-first-hours", marks=pytest.mark.slow)])
def test_the_rate_by_hand_of_a_drug_told_by_the_hour(name: str) -> None:
    (section,) = [s for s in document_of(name).sections if s.title == "By hand"]
    what, rest = section.lines[0].split(": ", 1)
    equation, numbers, result = rest.split(" = ")
    step = Printed(section.lines[0], "", what, equation, numbers, result)
    assert step.holds
    point = consult_of(name).chosen
    assert point is not None
    bound = letters_of(equation, numbers)
    assert bound["Vmax"] == pytest.approx(point.point.vmax_mg_per_day / 24, rel=5e-4)
    assert bound["Km"] == pytest.approx(point.point.km_mg_per_L, rel=5e-4)
    assert bound["aim"] == consult_of(name).goal.aim_mg_per_L
    for found in NUMBER.finditer(numbers):
        changed = numbers[: found.start()] + other_digit(numbers[found.start()]) + numbers[found.start() + 1 :]
        assert not replace(step, numbers=changed).holds or not is_worked(equation, changed)


def test_every_kind_of_line_is_met(monkeypatch: pytest.MonkeyPatch) -> None:
    """Each place of the module that makes a line makes one in some note of this test."""
    made: set[int] = set()

    def recorded(*given: Any, **named: Any) -> Step:
        made.add(sys._getframe(1).f_lineno)
        return Step(*given, **named)

    monkeypatch.setattr(module, "Step", recorded)
    for name in QUICK:
        module.workings(consult_of(name))
    tree = ast.parse(Path(str(module.__file__)).read_text(encoding="utf-8"))
    places = {n.lineno for n in ast.walk(tree) if isinstance(n, ast.Call) and getattr(n.func, "id", "") == "Step"}
    assert len(places) >= 18
    assert places - made == set()


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
