"""Writes the snapshots again."""

from __future__ import annotations

from tests.unit.golden import FOLDER, names, snapshot

for name in names():
    (FOLDER / f"{name}.txt").write_text(snapshot(name), encoding="utf-8")
for old in FOLDER.glob("*.txt"):
    if old.stem not in names():
        old.unlink()
