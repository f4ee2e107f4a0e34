"""The folder of a back-test: what is read for whom, and every refusal in full."""

from __future__ import annotations

import random
import re
from pathlib import Path

import pytest

from pkcalc.backtest.department import Errors, write_department
from pkcalc.backtest.folder import Raw, case_of, open_folder
from pkcalc.backtest.outlook import check_drug
from pkcalc.backtest.parts import Plan, alone, open_store
from pkcalc.errors import CaseError

PATIENTS = """patient,weight,age,group_ward
a1,70 kg,40 years,east
b2,60 kg,50 years,west
"""
DOSES = """patient,form,amount,unit,every,from,until
a1,extended-capsule,300,mg,24 h,2026-01-01 21:00,2026-01-15 12:00
a1,extended-capsule,400,mg,24 h,2026-01-15 21:00,
b2,sodium,200,mg,12 h,2026-01-01 09:00,
"""
LEVELS = """patient,value,unit,kind,drawn
a1,8,mg/L,total,2026-01-15 07:00
a1,15,mg/L,total,2026-02-01 07:00
b2,40,umol/L,total,2026-01-20 08:00
"""


def department(path: Path, patients: str = PATIENTS, doses: str = DOSES, levels: str = LEVELS) -> Path:
    path.mkdir(parents=True, exist_ok=True)
    for name, text in (("patients", patients), ("doses", doses), ("levels", levels)):
        (path / f"{name}.csv").write_bytes(text.encode("utf-8", "surrogateescape"))
    return path


def raws(path: Path) -> list[Raw]:
    folder = open_folder(path)
    return list(folder.patients(0, folder.count))


def said(call: object, *args: object, **kwargs: object) -> list[str]:
    with pytest.raises(CaseError) as refusal:
        call(*args, **kwargs)  # type: ignore[operator]
    return [p.text for p in refusal.value.problems]


def test_each_patient_gets_the_rows_of_its_own_key(tmp_path: Path) -> None:
    first, second = raws(department(tmp_path / "d"))
    case = case_of(first, "phenytoin")
    assert [c.regimen.labelled_mg_per_day() for c in case.courses if c.regimen] == [300, 400]
    assert [x.reported_mg_per_L for x in case.levels] == [8, 15]
    assert (case.patient.weight_kg, case.patient.age_years) == (70, 40)
    assert first.groups == {"ward": "east"}
    other = case_of(second, "phenytoin")
    assert len(other.courses) == 1
    assert other.levels[0].reported_mg_per_L == pytest.approx(40 * 252.27 / 1000, rel=1e-3)


def test_the_order_of_the_rows_does_not_matter(tmp_path: Path) -> None:
    """Rows of all patients mixed give each patient the same rows, in the order of the file."""
    write_department(tmp_path / "d", drug="phenytoin", count=5, seed=4)
    whole = raws(tmp_path / "d")
    mixed = tmp_path / "mixed"
    mixed.mkdir()
    for name in ("patients", "doses", "levels"):
        head, *rest = (tmp_path / "d" / f"{name}.csv").read_text().splitlines()
        if name != "patients":
            keys = sorted({r.split(",")[0] for r in rest})
            by_key = {k: [r for r in rest if r.startswith(k)] for k in keys}
            chance = random.Random(1)
            rest = []
            while any(by_key.values()):
                rest.append(by_key[chance.choice([k for k in keys if by_key[k]])].pop(0))
        (mixed / f"{name}.csv").write_text("\n".join([head, *rest, ""]))
    for a, b in zip(whole, raws(mixed), strict=True):
        assert (a.key, a.row, a.doses, a.levels) == (b.key, b.row, b.doses, b.levels)


def test_semicolons_quotes_and_windows_line_ends(tmp_path: Path) -> None:
    plain = raws(department(tmp_path / "a"))

    def turned(t: str) -> str:
        return "\ufeff" + t.replace(",", ";").replace("a1;", '"a1";').replace("\n", "\r\n")

    other = raws(department(tmp_path / "b", turned(PATIENTS), turned(DOSES), turned(LEVELS)))
    for a, b in zip(plain, other, strict=True):
        assert case_of(a, "phenytoin") == case_of(b, "phenytoin")


def test_case_files_are_read_by_name(tmp_path: Path) -> None:
    from pkcalc.case import dump_case

    case = case_of(raws(department(tmp_path / "d"))[0], "phenytoin")
    files = tmp_path / "files"
    files.mkdir()
    (files / "z.json").write_text("{")
    (files / "a1.json").write_text(dump_case(case))
    first, second = raws(files)
    assert (first.key, second.key) == ("a1", "z")
    assert case_of(first, "phenytoin") == case
    assert "the text is not valid JSON at column 2" in said(case_of, second, "phenytoin")[0]


def test_questions_albumin_and_population_reach_the_case(tmp_path: Path) -> None:
    patients = "patient,weight,age,albumin,renal_failure,population\na1,70 kg,40 years,29 g/L,yes,grasela1983\n"
    case = case_of(raws(department(tmp_path / "d", patients))[0], "phenytoin")
    assert case.albumin is not None
    assert case.albumin.g_per_L == 29
    assert case.answer("renal_failure") == "yes"
    assert case.population == "grasela1983"


def test_what_is_wrong_with_a_patient_names_the_row_of_the_table(tmp_path: Path) -> None:
    levels = LEVELS.replace("b2,40,umol/L", "b2,forty,umol/L")
    _, wrong = raws(department(tmp_path / "d", levels=levels))
    assert said(case_of, wrong, "phenytoin") == [
        'levels.csv, row 4: "forty" was given. Allowed: a plain number such as 12.5 or 1250. Use digits and one '
        "decimal point only."
    ]
    patients = PATIENTS.replace("60 kg", "6000 kg")
    _, wrong = raws(department(tmp_path / "e", patients))
    text = said(case_of, wrong, "phenytoin")
    assert len(text) == 1
    assert text[0].startswith("patients.csv, row 3, Weight: ")


def test_rows_that_cannot_be_read_set_their_patient_aside(tmp_path: Path) -> None:
    patients = (
        PATIENTS + "a1,80 kg,40 years,east\n=2+2,70 kg,40 years,east\nc3,70 kg\n"
        'd4,"70 kg,40 years,east\ne5,70 kg,\udcff,east\n,70 kg,40 years,east\nf6,70 kg,40 years,east\n'
    )
    found = raws(department(tmp_path / "d", patients))
    assert [r.problem for r in found] == [
        "",
        "",
        "patients.csv, row 4: the key stands in an earlier row, too.",
        "patients.csv, row 5: the key must have 1 to 60 characters that can be seen, and must not start with = + - or @.",
        "patients.csv, row 6: it has 2 cells, and the row of column names has 4.",
        "patients.csv, row 7: the row cannot be read.",
        "patients.csv, row 8: the row cannot be read.",
        "patients.csv, row 9: the key must have 1 to 60 characters that can be seen, and must not start with = + - or @.",
        "levels.csv has no row of this patient.",
    ]


def test_a_broken_row_of_a_known_patient_is_never_passed_over(tmp_path: Path) -> None:
    """A dose that cannot be read must not become a dose that was not given."""
    doses = DOSES + 'b2,"sodium,200,mg,12 h,2026-01-02 09:00,\n'
    _, wrong = raws(department(tmp_path / "d", doses=doses))
    assert said(case_of, wrong, "phenytoin") == [
        "doses.csv, row 5: a quotation mark is not closed, or stands inside a cell. Allowed: cells such as 300 or "
        '"300 mg". Correct the quotation marks.'
    ]


def test_rows_of_nobody_are_counted(tmp_path: Path) -> None:
    folder = open_folder(department(tmp_path / "d", doses=DOSES + "x9,sodium,1,mg,8 h,2026-01-01 09:00,\n"))
    assert (folder.strays, folder.strays_shown) == (1, ("doses.csv, from row 5",))


def test_what_a_folder_must_hold(tmp_path: Path) -> None:
    assert said(open_folder, tmp_path / "none") == ["Folder none: it is not a folder. Check name and place."]
    empty = tmp_path / "empty"
    empty.mkdir()
    assert said(open_folder, empty) == [
        "Folder: patients.csv and doses.csv and levels.csv not found. Allowed: patients.csv, doses.csv and levels.csv, "
        "or case files (*.json). The columns stand in pkcalc backtest --help."
    ]
    both = department(tmp_path / "both")
    (both / "a.json").write_text("{}")
    assert said(open_folder, both) == [
        "Folder: it holds tables and case files. Allowed: tables, or case files. Put them in two folders."
    ]


def test_columns_that_cannot_be_used(tmp_path: Path) -> None:
    path = department(tmp_path / "a", patients="patient,weight,name,weight\n")
    assert said(open_folder, path) == [
        'patients.csv, row 1: the column "name" is not known. Allowed: patient, weight, age, sex, height, albumin, '
        "population, a question of the case file, group_.... Remove or rename it.",
        'patients.csv, row 1: the column "weight" stands twice. Allowed: each column once. Remove one.',
    ]
    path = department(tmp_path / "b", levels="value,unit,kind,drawn\n")
    assert said(open_folder, path) == [
        'levels.csv, row 1: the column "patient" is missing. Allowed: it must be there. Add it.'
    ]
    path = department(tmp_path / "c", patients="patient\n")
    assert said(open_folder, path) == [
        "patients.csv, row 1: the row of column names has neither commas nor semicolons. Allowed: commas, or "
        "semicolons. Export it as CSV, with the column names in the first row."
    ]
    path = department(tmp_path / "d", patients="patient,wei\udcffght\n")
    assert said(open_folder, path) == [
        'patients.csv, row 1: it is not UTF-8 text. Allowed: UTF-8 text. Save it as "CSV UTF-8".'
    ]


def test_an_unknown_drug() -> None:
    text = said(check_drug, "aspirin")[0]
    assert text.startswith('--drug: "aspirin" was given. Allowed: ')
    assert text.endswith("Choose one of these.")


def test_a_folder_of_results_holds_one_run(tmp_path: Path) -> None:
    plan = Plan(3, "f", "phenytoin", "", 1024, "0", "2026-01-01")
    open_store(tmp_path / "r", plan)
    open_store(tmp_path / "r", plan)
    other = Plan(4, "g", "phenytoin", "", 1024, "0", "2026-01-01")
    assert said(open_store, tmp_path / "r", other) == [
        "Folder of results r: it holds another run (count, fingerprint differ). Allowed: a new folder, or the one of "
        "the same run. Give another folder with --out, or delete that one."
    ]
    (tmp_path / "s").mkdir()
    (tmp_path / "s" / "letter.txt").write_text("")
    assert said(open_store, tmp_path / "s", plan) == [
        "Folder of results s: it is not empty and holds no run. Allowed: a new or an empty folder. Give another "
        "folder with --out."
    ]


def test_two_runs_never_share_a_folder_of_results(tmp_path: Path) -> None:
    def twice() -> None:
        with alone(tmp_path), alone(tmp_path):
            pass

    assert said(twice) == [
        f"Folder of results {tmp_path.name}: another run is writing to it. Allowed: one run at a time. Wait for it, "
        "or give another folder with --out."
    ]


def test_a_synthetic_department_is_marked_seeded_and_wrong_where_asked(tmp_path: Path) -> None:
    for name in ("a", "b"):
        write_department(tmp_path / name, drug="phenytoin", count=8, seed=8, errors=Errors(wrong=0.5))
    for table in ("patients.csv", "doses.csv", "levels.csv"):
        assert (tmp_path / "a" / table).read_bytes() == (tmp_path / "b" / table).read_bytes()
    folder = open_folder(tmp_path / "a")
    assert folder.synthetic
    bad = 0
    for raw in folder.patients(0, folder.count):
        try:
            case_of(raw, "phenytoin")
        except CaseError:
            bad += 1
    assert 1 <= bad <= 7
    units = {line.split(",")[2] for line in (tmp_path / "a" / "levels.csv").read_text().splitlines()[1:]}
    assert units == {"mg/L", "mcg/mL", "umol/L"}
    assert said(write_department, tmp_path / "a", drug="phenytoin", count=1, seed=1) == [
        "Folder a: it is not empty. Allowed: a new or an empty folder for synthetic patients. Choose another folder."
    ]


def test_the_help_names_every_column() -> None:
    from click.testing import CliRunner

    from pkcalc.backtest.folder import PATIENT_COLUMNS
    from pkcalc.cli import cli
    from pkcalc.spreadsheet import DOSE_COLUMNS, LEVEL_COLUMNS

    words = set(re.findall(r"[a-z_]+", CliRunner().invoke(cli, ["backtest", "--help"]).output))
    assert {*PATIENT_COLUMNS, *DOSE_COLUMNS, *LEVEL_COLUMNS} <= words
