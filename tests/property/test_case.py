"""Laws of the case file: exact round trip, and no input that ends in anything but a case or words."""

from __future__ import annotations

import copy
import json
import math
import random
from datetime import datetime, timedelta
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pkcalc.case import (
    COMPARED,
    AlbuminFile,
    AnswerFile,
    Case,
    CaseFile,
    ChosenFile,
    ClockDoseFile,
    DoseFile,
    EarlierForecastFile,
    LevelFile,
    PatientFile,
    PlanFile,
    ProposedFile,
    ReentryFile,
    TargetFile,
    check_case,
    dump_case,
    dump_case_file,
    parse_case_text,
    read_case_text,
)
from pkcalc.demos import demonstrations
from pkcalc.drugs.profile import load_profile
from pkcalc.errors import CannotEstimate, CaseError
from pkcalc.given import given_record

PROFILE = load_profile("phenytoin")
NOW = datetime(2026, 6, 1, 10)
ANSWERS = st.sampled_from(["yes", "no", "unknown"])
WORDS = st.text(st.characters(exclude_categories=("Cc", "Cf", "Cs")), max_size=40)
ORAL = st.sampled_from([f for f, form in PROFILE.forms.items() if form.absorption and form.amount_unit == "mg"])
AMOUNTS = st.integers(1, 800).map(lambda x: f"{x / 2:g} mg")


def before(days: int) -> st.SearchStrategy[str]:
    return st.integers(0, days * 96).map(lambda q: f"{NOW - timedelta(minutes=15 * q):%Y-%m-%d %H:%M}")


def daily() -> st.SearchStrategy[tuple[ClockDoseFile, ...]]:
    hours = st.lists(st.integers(0, 23), min_size=1, max_size=4, unique=True)
    return st.tuples(hours, AMOUNTS).map(lambda x: tuple(ClockDoseFile(time=f"{h:02d}:00", amount=x[1]) for h in x[0]))


COMMON = {
    "source": st.sampled_from(["given", "ordered", "stated"]),
    "given_by": st.sampled_from(["nurse", "carer", "self", "unknown"]),
    "confirmed": ANSWERS,
    "comment": WORDS,
}
EVERY = st.sampled_from(["6 h", "8 h", "12 h", "24 h", "2 days"])
LINES = st.one_of(
    st.builds(DoseFile, form=ORAL, amount=AMOUNTS, every=EVERY, **{"from": before(60)}, **COMMON),
    st.builds(DoseFile, form=ORAL, daily=daily(), **{"from": before(60)}, **COMMON),
    st.builds(DoseFile, form=ORAL, daily=daily(), for_about=st.sampled_from(["3 months", "10 days"]), **COMMON),
    st.builds(DoseFile, form=st.just("injection"), amount=AMOUNTS, at=before(60), over=st.just("30 min"), **COMMON),
)
ALBUMINS = st.none() | st.builds(
    AlbuminFile,
    value=st.integers(10, 60).map(lambda x: f"{x} g/L") | st.integers(10, 60).map(lambda x: f"{x / 10} g/dL"),
    taken=before(10),
    method=st.sampled_from(["BCG", "BCP", "other", "unknown"]),
    after_infusion=ANSWERS,
)
LEVELS = st.builds(
    LevelFile,
    value=st.integers(10, 800).map(lambda x: f"{x / 10} mg/L")
    | st.sampled_from(["<2.5 mg/L", ">40 mg/L", "60 umol/L"]),
    kind=st.just("total"),
    drawn=before(60),
    albumin=ALBUMINS,
    sample=st.sampled_from(["serum", "plasma", "gel tube", "unknown"]),
    comment=WORDS,
)
PLACES = st.lists(WORDS.map(lambda x: f"Level 1, {x}".strip()), max_size=4, unique=True).map(tuple)
REENTRIES = st.builds(
    lambda places, count, done, context: ReentryFile(
        done=done,
        compared=tuple(x for x in COMPARED if context or x != "context"),
        differences=places,
        left=places[:count],
        facts="0123456789ab",
    ),
    PLACES,
    st.integers(0, 4),
    before(30),
    st.booleans(),
)
FORECASTS = st.builds(
    EarlierForecastFile,
    drawn=before(60),
    kind=st.sampled_from(["total", "free", "normalised"]),
    median=st.just("10.5 mg/L"),
    low=st.just("8 mg/L"),
    high=st.sampled_from(["10.5 mg/L", "25 mcg/mL"]),
    regimen=WORDS,
    version=st.sampled_from(["", "0.1.0"]),
)
CASES = st.builds(
    CaseFile,
    pkcalc_case=st.just(1),
    comment=WORDS,
    label=WORDS,
    drug=st.just("phenytoin"),
    question=WORDS,
    now=st.just(f"{NOW:%Y-%m-%d %H:%M}"),
    patient=st.builds(
        PatientFile,
        age=st.sampled_from(["", "45 years", "80 years"]),
        sex=st.sampled_from(["female", "unknown"]),
        weight=st.sampled_from(["", "70 kg", "154 lb"]),
        height=st.sampled_from(["", "170 cm", "67 in"]),
    ),
    albumin=ALBUMINS,
    context=st.dictionaries(
        st.sampled_from([q for q in PROFILE.questions if not q.startswith("tube")]),
        ANSWERS | st.builds(AnswerFile, answer=ANSWERS, since=st.sampled_from(["", "3 Apr 2026"]), detail=WORDS),
        max_size=6,
    ),
    doses=st.lists(LINES, max_size=4).map(tuple),
    levels=st.lists(LEVELS, max_size=4).map(tuple),
    target=st.none() | st.just(TargetFile(low="10 mg/L", high="20 mg/L", reason="local")),
    aim=st.sampled_from(["", "15 mg/L"]),
    proposed=st.lists(st.builds(ProposedFile, form=ORAL, daily=daily()), max_size=2).map(tuple),
    plan=st.builds(PlanFile, shelf=st.sampled_from(["", *PROFILE.shelves]), order_by_loss=st.booleans()),
    chosen=st.none() | st.builds(ChosenFile, words=WORDS),
    forecast_then=st.lists(FORECASTS, max_size=3).map(tuple),
    reentry=st.none() | REENTRIES,
)


@given(CASES)
def test_round_trip_is_exact(file: CaseFile) -> None:
    text = dump_case_file(file)
    assert parse_case_text(text) == file
    assert parse_case_text(text.encode()) == file
    assert dump_case_file(parse_case_text(text)) == text
    case = check_case(file)
    assert read_case_text(dump_case(case)) == case
    assert read_case_text(text).hash == case.hash


@settings(max_examples=60)
@given(CASES)
def test_the_record_of_any_case_is_within_its_time(file: CaseFile) -> None:
    case = check_case(file)
    try:
        record = given_record(case, PROFILE)
    except CannotEstimate:
        return
    assert case.now is not None
    for dose in record.doses:
        assert record.start_day <= dose.time_day <= case.day(case.now) + 1 / 1440
        assert 0 < dose.amount_mg <= 3000


# --- mutations of the demonstration cases ----------------------------------------------------------------

ABSURD = (
    *(
        None,
        True,
        0,
        -1,
        1e308,
        -1e-308,
        10**400,
        [],
        {},
        [[]],
        {"a": 1},
        "",
        " ",
        "nan",
        "inf mg/L",
        "-3 mg",
        "1e999 mg",
    ),
    *(
        "1_000 mg",
        "12,5 mg",
        "MG/L",
        "8 MG/L",
        "99999999999999999999 mg/L",
        "0 mg/L",
        "9**9**9",
        "\u0000",
        "\u202e",
        "\ufeff",
    ),
    *(
        "03/04/2026",
        "2026-02-30 10:00",
        "0001-01-01 00:00",
        "9999-12-31 23:59",
        "2026-03-30 10:00Z",
        "24:00",
        "\ud83d\ude00",
    ),
    *("1990-01-01 00:00", "2100-12-31 23:59", "0.0000001 mg", "168 h", "1 h", "100 years", "<", "><8 mg/L", "a" * 5000),
    *(
        "2026-03-30 10:00 +23:59",
        "2026-03-30 10:00 -23:59",
        "%s%n",
        "=1+1",
        "{{x}}",
        "<script>",
        "../../x",
        "sodium",
        "injection",
    ),
)


def places(value: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    steps = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    return [p for key, inner in steps for p in ((*path, key), *places(inner, (*path, key)))]


def mutated(text: str, chance: random.Random) -> str | bytes:
    """One demonstration case, broken in one or two ways."""
    data = json.loads(text)
    for _ in range(chance.randint(1, 2)):
        path = chance.choice(places(data))
        spot = data
        for step in path[:-1]:
            spot = spot[step]
        kind = chance.randrange(6)
        if kind == 0:
            del spot[path[-1]]
        elif kind == 1 and isinstance(spot, dict):
            spot[path[-1] + chance.choice("sx_ ")] = spot.pop(path[-1])
        elif kind == 2 and isinstance(spot, list):
            spot.extend(copy.deepcopy(spot) * chance.randint(1, 8))
        elif kind == 3 and isinstance(spot[path[-1]], str) and spot[path[-1]]:
            word = spot[path[-1]]
            at = chance.randrange(len(word))
            spot[path[-1]] = word[:at] + chance.choice("0159.-,eE <>:/\u0000\u00b5") + word[at + chance.randint(0, 1) :]
        else:
            spot[path[-1]] = copy.deepcopy(chance.choice(ABSURD))
        if not places(data):
            break
    out = json.dumps(data, ensure_ascii=chance.random() < 0.5)
    kind = chance.randrange(12)
    if kind == 0:
        at = chance.randrange(len(out))
        return out[:at] + chance.choice('{}[]",:\\\n\x00') + out[at + 1 :]
    if kind == 1:
        return out.encode(chance.choice(["utf-16", "utf-8-sig", "utf-32"]), errors="replace")
    if kind == 2:
        return out.encode("latin-1", errors="replace") + bytes([chance.randrange(256)])
    return out[: chance.randrange(len(out))] if kind == 3 else out


def in_range(case: Case) -> None:
    """Whatever was read lies within its physical range."""
    p, profile = case.patient, load_profile(case.drug)
    for value, low, high in ((p.age_years, 0, 120), (p.weight_kg, 0.4, 400), (p.height_cm, 25, 250)):
        assert value is None or low <= value <= high
    for level in case.levels:
        assert 0 < level.reported_mg_per_L <= profile.level_gate_mg_per_L(level.kind)[1]
    for albumin in (case.albumin, *(x.albumin for x in case.levels)):
        assert albumin is None or 10 <= albumin.g_per_L <= 60
    for course in case.courses:
        for intake in course.regimen.intakes if course.regimen else (course.single,) if course.single else ():
            assert 0 < intake.labelled_mg <= profile.forms[intake.form].largest_dose_mg
            assert 0 <= intake.hour < 24
    try:
        record = given_record(case, profile)
    except CannotEstimate:
        return
    assert len(record.doses) <= 100_001
    assert all(math.isfinite(d.time_day) and d.amount_mg > 0 for d in record.doses)


def fuzz(seed: int, times: int) -> tuple[int, int]:
    chance = random.Random(seed)
    texts = [d.text for d in demonstrations()]
    read = refused = 0
    for _ in range(times):
        text = mutated(chance.choice(texts), chance)
        try:
            case = read_case_text(text)
        except CaseError as error:
            refused += 1
            for problem in error.problems:
                assert problem.where
                assert problem.given
                assert problem.fix
                assert len(problem.text) < 2000
        else:
            read += 1
            in_range(case)
            assert read_case_text(dump_case(case)).file == case.file
    return read, refused


def test_mutated_demonstration_cases_are_read_or_refused_in_words() -> None:
    read, refused = fuzz(seed=1, times=400)
    assert read > 20
    assert refused > 200


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(2, 10))
def test_thousands_of_mutated_demonstration_cases(seed: int) -> None:
    read, refused = fuzz(seed=seed, times=1000)
    assert read > 50
    assert refused > 500


@pytest.mark.parametrize("key", ["label", "question", "drug", "now", "aim"])
def test_a_text_of_five_million_letters_is_refused(key: str) -> None:
    data = {"pkcalc_case": 1, "drug": "phenytoin", key: "a" * 5_000_000}
    with pytest.raises(CaseError) as caught:
        read_case_text(json.dumps(data))
    assert str(caught.value) == (
        "Case file: more than 2 MB were given. Allowed: at most 2 MB. Give the case of one patient only."
    )


@settings(max_examples=200)
@given(st.binary(max_size=200) | st.text(max_size=200))
def test_any_text_is_refused_in_words(text: str | bytes) -> None:
    with pytest.raises(CaseError):
        read_case_text(text)
