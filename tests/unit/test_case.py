"""The case file: demonstration cases, schema, hostile files, and what is read from a checked case."""

from __future__ import annotations

import json
from pathlib import Path

import jsonschema
import pytest

from pkcalc.case import (
    MAX_BYTES,
    case_schema,
    dump_case,
    label_looks_like_identifier,
    load_case,
    overlapping_lines,
    parse_case_text,
    read_case_text,
)
from pkcalc.demos import demonstration, demonstrations
from pkcalc.drugs.profile import load_profile
from pkcalc.errors import CaseError
from tests.unit.cases import PLAIN, plain

NAMES = [d.name for d in demonstrations()]


@pytest.mark.parametrize("name", NAMES)
def test_demonstration_cases_load_fit_the_schema_and_come_back_as_they_were(name: str) -> None:
    case = demonstration(name)
    text = dump_case(case)
    jsonschema.Draft202012Validator(case_schema()).validate(json.loads(text))
    assert read_case_text(text).file == case.file
    assert read_case_text(text).hash == case.hash


def test_the_schema_is_a_schema_and_refuses_what_the_reader_refuses() -> None:
    jsonschema.Draft202012Validator.check_schema(case_schema())
    schema = jsonschema.Draft202012Validator(case_schema())
    for wrong in ({"dosses": []}, {"context": {"valproat": "yes"}}, {"drug": 3}, {"label": "a" * 201}):
        data = {**PLAIN, **wrong}
        assert not schema.is_valid(data)
        with pytest.raises(CaseError):
            read_case_text(json.dumps(data))


def test_questions_and_other_levels_are_those_of_the_drug() -> None:
    """What one drug's file adds, no case of another drug may hold: schema and reader agree."""
    schema = jsonschema.Draft202012Validator(case_schema())
    other = {**PLAIN["levels"][0], "other_levels": {"valproate": "60 mg/L"}}
    fits = {**PLAIN, "levels": [other]}
    assert schema.is_valid(fits)
    level = read_case_text(json.dumps(fits)).levels[0]
    assert (level.other_mg_per_L("valproate"), level.other_mg_per_L("warfarin")) == (60.0, None)
    ethanol = json.loads(dump_case(demonstration("ethanol-first-hours")))
    level = {"value": "92 mg/dL", "kind": "total", "other_levels": {"valproate": "60 mg/L"}}
    for wrong, said in (
        (
            {**PLAIN, "levels": [{**other, "other_levels": {"warfarin": "1 mg/L"}}]},
            "Level 1, other levels, warfarin (line 1): no level of this drug is asked for. Allowed: valproate. "
            "Remove it.",
        ),
        (
            {**ethanol, "levels": [level]},
            "Level 1, other levels, valproate (line 1): no level of this drug is asked for. Allowed: none with a level "
            "of ethanol as antidote. Remove it.",
        ),
        (
            {**ethanol, "context": {"hla_b1502": "no"}},
            "Context, hla b1502 (line 1): this question is not known. Allowed: "
            + ", ".join(load_profile("ethanol").questions)
            + ". Remove it.",
        ),
    ):
        assert not schema.is_valid(wrong)
        with pytest.raises(CaseError) as caught:
            read_case_text(json.dumps(wrong))
        assert [p.text for p in caught.value.problems] == [said]


def test_there_is_no_field_for_a_name() -> None:
    text = json.dumps(case_schema())
    assert not {'"surname"', '"first_name"', '"patient_name"', '"mrn"', '"date_of_birth"'} & set(text.split())
    with pytest.raises(CaseError, match=r"^Patient, name \(line 1\): this key is not known\."):
        read_case_text(json.dumps({**PLAIN, "patient": {"name": "x"}}))


def test_all_problems_come_at_once_each_with_its_line() -> None:
    text = json.dumps(
        {
            **PLAIN,
            "now": "03/04/2026",
            "patient": {"age": "45", "weight": "60 KG"},
            "albumin": {"value": "29 g/dL"},
            "levels": [{"value": "8", "kind": "total"}],
        },
        indent=1,
    )
    lines = text.splitlines()
    with pytest.raises(CaseError) as caught:
        read_case_text(text)
    found = {p.where.split(" (line ")[0]: int(p.where.split(" (line ")[1][:-1]) for p in caught.value.problems}
    assert list(found) == ["Age", "Weight", "Time of the consult", "Level 1", "Albumin"]
    assert '"age"' in lines[found["Age"] - 1]
    assert '"weight"' in lines[found["Weight"] - 1]
    assert '"now"' in lines[found["Time of the consult"] - 1]
    assert lines[found["Level 1"] - 1].strip() == "{"
    assert '"albumin"' in lines[found["Albumin"] - 1]


def test_a_comment_is_kept_and_never_used() -> None:
    assert plain(comment="seen on the ward").file.comment == "seen on the ward"
    assert plain(comment="x").levels == plain().levels


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(CaseError) as caught:
        load_case(tmp_path / "none.json")
    assert str(caught.value) == (
        "Case file none.json: the file could not be opened (no such file or directory). Check name and folder."
    )
    with pytest.raises(CaseError) as caught:
        load_case(tmp_path)
    assert str(caught.value).endswith("the file could not be opened (is a directory). Check name and folder.")
    latin = tmp_path / "latin.json"
    latin.write_bytes('{"pkcalc_case": 1, "label": "\xe9"}'.encode("latin-1"))
    with pytest.raises(CaseError) as caught:
        load_case(latin)
    assert str(caught.value) == (
        "Case file latin.json: byte 30 is not UTF-8 text. Allowed: UTF-8 text. Save the file as UTF-8."
    )
    large = tmp_path / "large.json"
    with large.open("wb") as stream:
        stream.truncate(50_000_000)
    with pytest.raises(CaseError) as caught:
        load_case(large)
    assert str(caught.value) == (
        "Case file large.json: more than 2 MB were given. Allowed: at most 2 MB. Give the case of one patient only."
    )


def test_a_file_with_a_byte_order_mark_is_read() -> None:
    assert read_case_text(b"\xef\xbb\xbf" + json.dumps(PLAIN).encode()).file == plain().file


HOSTILE = {
    "a string without end": '"' + '\\"' * (MAX_BYTES // 2 - 1),
    "brackets": "[" * MAX_BYTES,
    "closing brackets": "]" * MAX_BYTES,
    "unknown keys": "{" + ",".join(f'"k{i}":1' for i in range(100_000)) + "}",
    "one long key": '{"' + "k" * (MAX_BYTES - 10) + '":1}',
    "one long list": '{"doses":[' + ",".join(["1"] * 900_000) + "]}",
    "keys twice": "{" + ",".join(['"k":1'] * 100_000) + "}",
    "digits": '{"pkcalc_case":' + "9" * 1_000_000 + "}",
    "many missed doses": json.dumps({**PLAIN, "doses": [{**PLAIN["doses"][1], "missed": ["2026-11-01 20:00"] * 5000}]}),
    "doses every hour": json.dumps(
        {**PLAIN, "doses": [{**PLAIN["doses"][1], "every": "1 h", "from": "1990-01-01 00:00"}] * 2000}
    ),
}


@pytest.mark.parametrize("kind", HOSTILE)
def test_hostile_texts_are_refused(kind: str) -> None:
    """Each once took minutes or gigabytes in some reader; here each must end, in words, within the suite's patience."""
    with pytest.raises(CaseError) as caught:
        read_case_text(HOSTILE[kind])
    assert 1 <= len(caught.value.problems) <= 5001


@pytest.mark.parametrize(
    "label",
    ["MRN 12345", "943 476 5919", "1981-04-03", "3 Apr 1981", "03.04.81", "Mary Jones", "Jones, Mary", "12-34-56"],
)
def test_labels_that_look_like_an_identifier(label: str) -> None:
    assert label_looks_like_identifier(label)


@pytest.mark.parametrize(
    "label", ["", "bed 4", "second opinion", "Case B", "ward 7, week 3", "case 2026", "300 mg twice"]
)
def test_labels_that_do_not(label: str) -> None:
    assert not label_looks_like_identifier(label)


def test_overlapping_lines() -> None:
    first = {"form": "extended-capsule", "amount": "300 mg", "every": "24 h", "from": "2026-08-01 21:00"}
    ended = {**first, "until": "2026-09-01 12:00"}
    later = {**first, "from": "2026-09-01 21:00"}
    assert overlapping_lines(plain(doses=[ended, later])) == ()
    assert overlapping_lines(plain(doses=[first, later])) == (0, 1)
    assert overlapping_lines(plain(doses=[later, first, first])) == (0, 1, 2)
    assert overlapping_lines(plain(doses=[first, {**later, "form": "suspension"}])) == (0, 1)
    assert overlapping_lines(plain(doses=[first, {**later, "source": "ordered"}])) == ()
    about = {"form": "extended-capsule", "amount": "300 mg", "every": "24 h", "for_about": "3 months"}
    assert overlapping_lines(plain(doses=[about, {**about, "amount": "100 mg"}], levels=[])) == (0, 1)


def test_an_infusion_left_running_beside_the_new_rate_is_found() -> None:
    """A rate changed by a second line while the first has no end: both would be added up."""
    data = json.loads(dump_case(demonstration("ethanol-first-hours")))
    rate = data["doses"][1]
    changed = {**rate, "rate": "120 mL/h", "from": "2026-06-02 12:00"}
    assert overlapping_lines(read_case_text(json.dumps(data))) == ()
    both = {**data, "doses": [*data["doses"], changed]}
    assert overlapping_lines(read_case_text(json.dumps(both))) == (1, 2)
    ended = {**data, "doses": [data["doses"][0], {**rate, "until": "2026-06-02 12:00"}, changed]}
    assert overlapping_lines(read_case_text(json.dumps(ended))) == ()


def test_a_newer_version_is_refused_before_anything_else() -> None:
    with pytest.raises(CaseError) as caught:
        parse_case_text('{"pkcalc_case": 2, "unheard_of": 1}')
    assert len(caught.value.problems) == 1
