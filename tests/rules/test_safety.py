"""The hazard table of SAFETY.md: its tests exist, and every stop stands in it."""

from __future__ import annotations

import re
from pathlib import Path

from pkcalc.cautions import rules_of
from pkcalc.drugs.profile import drug_names

ROOT = Path(__file__).parents[2]


def rows() -> list[list[str]]:
    found = []
    for line in (ROOT / "SAFETY.md").read_text(encoding="utf-8").splitlines():
        cells = [c.strip() for c in line.strip().strip("|").split("|")]
        if line.startswith("|") and len(cells) == 5 and not cells[0].startswith(("hazard", "---")):
            found.append(cells)
    return found


def test_every_guarding_test_exists() -> None:
    table = rows()
    assert len(table) >= 15
    for hazard, _, control, _, guards in table:
        assert control, hazard
        assert guards, hazard
        for guard in guards.split("; "):
            path, _, name = guard.partition("::")
            text = (ROOT / path).read_text(encoding="utf-8")
            assert re.search(rf"^(?:async )?def {name}\(", text, re.M), f"{hazard}: {guard} does not exist"


def test_every_stop_stands_in_the_table() -> None:
    listed = {name.strip() for row in rows() for name in row[3].split(",") if name.strip()}
    stops = {r.id for name in drug_names() for r in rules_of(name) if r.severity == "stop"}
    assert stops - listed == set(), "stops without a row"
    assert listed - stops == set(), "rows naming no stop"
