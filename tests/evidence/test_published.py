"""The published examples shipped with the package, run one by one.

Sources, places and authors' slips stand in pkcalc/evidence/*.toml beside each example; `pkcalc selfcheck` runs the
same files.
"""

from __future__ import annotations

from dataclasses import replace

import pytest

from pkcalc import formulas, selfcheck
from pkcalc.errors import CaseError, DrugFileError
from pkcalc.selfcheck import Example, check, load_examples, parse_examples, unnoticed_inputs
from pkcalc.sources import all_sources

EXAMPLES = load_examples()


@pytest.mark.parametrize("example", EXAMPLES, ids=lambda e: e.id)
def test_published_example(example: Example) -> None:
    for row in check(example):
        assert row.agrees, f"{row.quantity}: expected {row.expected}, ours {row.ours}. {row.note}"


def test_reference_curves_agree() -> None:
    rows = selfcheck.reference_curves()
    assert [r.id for r in rows] == ["mm_reference_curves", "mm_edge_cases"]
    assert all(r.agrees for r in rows)


def test_a_curve_off_by_a_trillionth_is_found(monkeypatch: pytest.MonkeyPatch) -> None:
    exact = formulas.level_after
    monkeypatch.setattr(formulas, "level_after", lambda **inputs: exact(**inputs) * (1 + 1e-12))
    assert not any(r.agrees for r in selfcheck.reference_curves())


def test_enough_examples_of_enough_kinds() -> None:
    numbers = [x for e in EXAMPLES for x in e.expected]
    assert len(numbers) >= 60
    assert sum(e.kind == "worked example" and e.status == "read" for e in EXAMPLES) >= 20
    assert {e.call for e in EXAMPLES} <= set(selfcheck.CALLS)


def test_every_example_names_a_known_source() -> None:
    assert {e.source for e in EXAMPLES} <= set(all_sources())


def test_every_file_is_read() -> None:
    assert {"two_levels.toml", "one_level.toml", "steady_state.toml", "binding.toml", "doses.toml"} <= set(
        selfcheck.evidence_files()
    )


def example(**changes: object) -> str:
    """The text of one good example, with changes."""
    entry: dict[str, object] = {
        "id": '"X1"',
        "call": '"steady_state_level"',
        "source": '"rowland-tozer"',
        "where": '"chapter 16"',
        "kind": '"worked example"',
        "status": '"read"',
        "inputs": '{ dose_rate = "300 mg/day", vmax = "500 mg/day", km = "4 mg/L" }',
        "expected": '{ level = "6.0 mg/L" }',
    }
    entry.update(changes)
    return "[[example]]\n" + "\n".join(f"{k} = {v}" for k, v in entry.items() if v is not None) + "\n"


def test_a_wrong_value_is_found() -> None:
    (good,) = parse_examples(example(), "x.toml")
    assert check(good)[0].agrees
    (bad,) = parse_examples(example(expected='{ level = "6.1 mg/L" }'), "x.toml")
    row = check(bad)[0]
    assert not row.agrees
    assert (row.expected, row.ours) == ("6.1 mg/L", "6 mg/L")


def test_printed_digits_set_the_tolerance() -> None:
    tolerances = {"6 mg/L": 0.5, "6.0 mg/L": 0.05, "6.00 mg/L": 0.005, "1,006 mg/L": 0.5}
    for text, tolerance in tolerances.items():
        (found,) = parse_examples(example(expected=f'{{ level = "{text}" }}'), "x.toml")
        assert found.expected[0].tolerance == pytest.approx(tolerance)


def test_an_input_nobody_would_notice_fails_the_example() -> None:
    (vague,) = parse_examples(
        example(expected='{ level = "6 mg/L" }', tolerance="{ level = 100 }", why='"far too wide"'), "x.toml"
    )
    assert unnoticed_inputs(vague) == ("dose_rate", "vmax", "km")
    row = check(vague)[0]
    assert not row.agrees
    assert row.note == "far too wide Not sensitive as declared: dose_rate, km, vmax."


def test_a_declared_insensitivity_must_be_real() -> None:
    (stale,) = parse_examples(example(unnoticed='{ km = "a reason" }'), "x.toml")
    assert not check(stale)[0].agrees


def test_a_refusal_expected_and_not_given_fails() -> None:
    (wrong,) = parse_examples(example(expected='"no steady state"'), "x.toml")
    assert [r.ours for r in check(wrong)] == ["a number"]
    assert not check(wrong)[0].agrees


def test_a_number_expected_and_refused_fails() -> None:
    text = example(inputs='{ dose_rate = "600 mg/day", vmax = "500 mg/day", km = "4 mg/L" }')
    (wrong,) = parse_examples(text, "x.toml")
    row = check(wrong)[0]
    assert not row.agrees
    assert row.ours == (
        "refused: The dose rate, 600 mg/day, is at or above Vmax, 500 mg/day. There is no steady state: more is "
        "given than the body can remove, and the level rises without end. Give a dose rate below Vmax, or check "
        "Vmax and the salt factor."
    )


def test_a_broken_function_is_found(monkeypatch: pytest.MonkeyPatch) -> None:
    call = selfcheck.CALLS["steady_state_level"]
    broken = replace(call, run=lambda v: {"level": v["km"] * v["dose_rate"] / v["vmax"]})
    monkeypatch.setitem(selfcheck.CALLS, "steady_state_level", broken)
    rows = selfcheck.run()
    missed = [r.id for r in rows if not r.agrees]
    assert {"D1-300", "D1-425", "C2-level"} <= set(missed)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"id": None}, "x.toml, (no id), id: missing. Add it as text."),
        ({"source": None}, "x.toml, X1, source: missing. Add it as text."),
        ({"where": '""'}, "x.toml, X1, where: missing. Add it as text."),
        (
            {"kind": '"hearsay"'},
            'x.toml, X1, kind: "hearsay" was found. Write one of: worked example, label, guideline, dataset, '
            "independent calculation, definition, common practice.",
        ),
        ({"status": '"seen"'}, 'x.toml, X1, status: "seen" was found. Write one of: read, memory.'),
        (
            {"source": '"winter-textbook"'},
            'x.toml, X1, status: it says "read", but its source is from memory. Write "memory".',
        ),
        (
            {"source": '"nobody1900"'},
            'sources.toml: there is no source "nobody1900". Add it there, or mend the key.',
        ),
        (
            {"expected": None},
            "x.toml, X1, expected: missing. Add the expected values, or one of: no steady state, refused.",
        ),
        (
            {"expected": '{ level = "about 6" }'},
            "x.toml, X1, expected.level: not a number with its unit in quotation marks. Write it as printed.",
        ),
        (
            {"expected": '{ level = "6.0 mg" }'},
            'x.toml, X1, expected.level: the unit "mg" was found. Write one of: mg/L, mcg/mL, mg/dL, g/L, umol/L, '
            "mmol/L.",
        ),
        (
            {"expected": '{ lvl = "6.0 mg/L" }'},
            "x.toml, X1, expected.lvl: unknown result. Known are: level.",
        ),
        (
            {"tolerance": "{ level = 1.0 }"},
            "x.toml, X1, why: missing. A tolerance wider than the printed digits needs its reason.",
        ),
        (
            {"tolerance": "{ vmax = 1.0 }", "why": '"x"'},
            "x.toml, X1, tolerance.vmax: no such expected value. Take it out or mend its name.",
        ),
        (
            {"unnoticed": '{ v = "x" }'},
            "x.toml, X1, unnoticed.v: no such input. Take it out or mend its name.",
        ),
        (
            {"inputs": '{ rate = "1 mg/day" }'},
            "x.toml, X1, inputs.rate: unknown input. Known are: dose_rate, vmax, km.",
        ),
        (
            {"inputs": "{ dose_rate = 300 }"},
            "x.toml, X1, dose_rate: not a text. Write numbers in quotation marks, with their unit.",
        ),
        (
            {"remark": '"x"'},
            "x.toml, X1, remark: unknown entry. Known are: call, expected, id, inputs, kind, note, source, status, "
            "tolerance, unnoticed, where, why.",
        ),
    ],
)
def test_incomplete_example_is_refused(changes: dict[str, object], message: str) -> None:
    with pytest.raises(DrugFileError) as caught:
        parse_examples(example(**changes), "x.toml")
    assert str(caught.value) == message


def test_unknown_call_is_refused() -> None:
    with pytest.raises(DrugFileError) as caught:
        parse_examples(example(call='"magic"'), "x.toml")
    assert str(caught.value).startswith('x.toml, X1, call: "magic" is not a known function. Known are: ')


def test_an_input_with_a_wrong_unit_is_refused() -> None:
    text = example(inputs='{ dose_rate = "300 mg", vmax = "500 mg/day", km = "4 mg/L" }')
    with pytest.raises(CaseError):
        parse_examples(text, "x.toml")


def test_values_from_memory_say_so() -> None:
    for e in EXAMPLES:
        assert ("Value from memory." in e.note) == (e.status == "memory")


def test_table_and_data_say_the_same() -> None:
    rows = selfcheck.run()
    text, data = selfcheck.as_text(rows), selfcheck.as_data(rows)
    assert text.splitlines()[0].split() == ["case", "source", "quantity", "expected", "ours", "agrees"]
    assert text.splitlines()[-1] == f"{len(rows)} of {len(rows)} agree."
    assert data["all_agree"] is True
    assert data["agree"] == data["of"] == len(rows)


def test_a_miss_is_counted_and_explained() -> None:
    rows = selfcheck.run()
    missed = (*rows[:1], replace(rows[1], agrees=False, note="a reason"))
    text = selfcheck.as_text(missed)
    assert text.splitlines()[-2] == "1 of 2 agree."
    assert text.splitlines()[-1] == f"{rows[1].id}: a reason"
    assert selfcheck.as_data(missed)["all_agree"] is False
