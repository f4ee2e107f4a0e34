"""What no committed file may hold: registry hosts, machine paths, a drug's name in the core."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

import pytest

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


def test_no_module_of_the_core_names_a_drug() -> None:
    names = [p.stem for p in (ROOT / "pkcalc" / "drugs").glob("[!_]*.toml")]
    assert "phenytoin" in names
    words = re.compile("|".join([*names, "fosphenytoin"]), re.I)
    allowed = re.compile(r'default="phenytoin"')  # the command line's default drug, printed with every result
    hits = []
    for path in (ROOT / "pkcalc").rglob("*.py"):
        for number, line in enumerate(path.read_text(encoding="utf-8").splitlines(), 1):
            if words.search(line) and not allowed.search(line):
                hits.append(f"{path.relative_to(ROOT)}:{number}: {line.strip()}")
    assert hits == []
