"""What no committed file may hold: registry hosts, machine paths, a drug's name in the core."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

import pytest

from pkcalc.case import case_schema
from pkcalc.drugs.profile import drug_names, load_profile
from pkcalc.drugs.questions import common_questions
from pkcalc.note.schema import note_schema

ROOT = Path(__file__).parents[2]
# Put together from parts, so that this file does not hold what it looks for.
HOSTS = re.compile(
    r"https?://[^ \"']*(?:" + "|".join(["py" + "pi", "python" + "hosted", "npm" + "js", "deb" + r"ian\.org"]) + ")",
    re.I,
)
PATHS = re.compile("(?:^|[\\s\"'=(])/" + "(?:" + "|".join(["wo" + "rk", "ro" + "ot", "ho" + "me", "farm"]) + ")/", re.M)


def tracked() -> list[Path]:
    listed = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, check=True).stdout
    return [ROOT / name for name in listed.decode().split("\0") if name and (ROOT / name).is_file()]


def texts() -> list[tuple[str, str]]:
    found = []
    for path in tracked():
        data = path.read_bytes()
        if b"\0" not in data[:4096]:
            found.append((str(path.relative_to(ROOT)), data.decode("utf-8", "replace")))
    return found


def test_there_are_files_to_scan() -> None:
    assert len(texts()) > 20


@pytest.mark.parametrize(
    ("pattern", "example"), [(HOSTS, "see https://py" + "pi.example/simple"), (PATHS, "cd /wo" + "rk/x")]
)
def test_no_file_names_a_host_or_a_machine_path(pattern: re.Pattern[str], example: str) -> None:
    assert pattern.search(example), "the pattern itself must find something"
    hits = [f"{name}: {m.group()!r}" for name, text in texts() for m in pattern.finditer(text)]
    assert hits == []


#: Words of one drug's own disease or tests, beside the names that stand in the drug files.
OF_ONE_DRUG = ("seiz", "epilep", "barbit", "nystagm", "methanol", "glycol", "glucose", "hla-b", "hla_b", "cyp2c")
#: The command line's default drug, printed with every result, and the limits of use in its help.
ALLOWED = re.compile(r'default="phenytoin"|^\s+epilepticus is treated by protocol now; acute overdose belongs to')


def drug_words() -> re.Pattern[str]:
    """Every name by which a drug file calls its drug, its salts, or another drug that matters for it."""
    words: set[str] = set(OF_ONE_DRUG)
    for name in drug_names():
        profile = load_profile(name)
        words |= {profile.id, *profile.names, *profile.other_levels, *(f.salt for f in profile.forms.values())}
        words |= set(profile.questions) - set(common_questions())
        known = profile.interactions
        words |= {w for w in (*known.raising, *known.lowering, *known.either) if re.fullmatch("[a-z]{6,}", w)}
    return re.compile("|".join(re.escape(w) for w in sorted(words - {"smoking"})), re.I)


def core_texts() -> list[tuple[str, str]]:
    """Code, templates, the texts for every drug, and the field names of the case and of the note."""
    paths = [*(ROOT / "pkcalc").rglob("*.py"), *(ROOT / "pkcalc" / "note" / "templates").glob("*.*")]
    paths += [ROOT / "pkcalc" / "cautions.toml", ROOT / "pkcalc" / "drugs" / "_questions.toml"]
    found = [(str(p.relative_to(ROOT)), p.read_text(encoding="utf-8")) for p in paths]
    return [*found, ("case schema", keys_of(case_schema())), ("note schema", keys_of(note_schema()))]


def keys_of(schema: object) -> str:
    """The names of every field of a JSON Schema, line by line."""
    if isinstance(schema, list):
        return "\n".join(keys_of(x) for x in schema)
    if not isinstance(schema, dict):
        return ""
    named = schema.get("properties", {})
    return "\n".join([*named, *(keys_of(x) for x in schema.values())])


def named_drugs(texts: list[tuple[str, str]]) -> list[str]:
    words = drug_words()
    return [
        f"{name}:{number}: {line.strip()}"
        for name, text in texts
        for number, line in enumerate(text.splitlines(), 1)
        if words.search(line) and not ALLOWED.search(line)
    ]


def test_nothing_of_the_core_names_a_drug() -> None:
    assert {"phenytoin", "ethanol"} <= set(drug_names())
    assert len(core_texts()) > 60
    assert named_drugs(core_texts()) == []


@pytest.mark.parametrize(
    "planted",
    [
        "    valproate_level: Text = ''",
        "if case.answer('hla_b1502') == 'yes':",
        'text = "Holding it can bring on seizures."',
        "# as for fosphenytoin",
        "glucose",
    ],
)
def test_a_drug_named_in_the_core_is_found(planted: str) -> None:
    assert named_drugs([("planted.py", planted)]) == [f"planted.py:1: {planted.strip()}"]


def test_a_field_named_after_a_drug_is_found() -> None:
    schema = {"properties": {"levels": {"items": {"properties": {"valproate_level": {"type": "string"}}}}}}
    assert named_drugs([("case schema", keys_of(schema))]) == ["case schema:2: valproate_level"]
    assert {"levels", "other_levels", "context"} <= set(keys_of(case_schema()).splitlines())
    assert "withdrawal_risk" in keys_of(note_schema()).splitlines()
