"""The notes of the demonstration cases against their snapshots (see `tests/unit/golden`)."""

from __future__ import annotations

import pytest

from tests.unit.golden import FOLDER, names, snapshot

QUICK = ("clean-pair", "over-the-ceiling", "tube-feed")


def compared(name: str) -> None:
    """Line by line, so that a failure shows what changed."""
    assert snapshot(name).splitlines() == (FOLDER / f"{name}.txt").read_text(encoding="utf-8").splitlines()


@pytest.mark.parametrize("name", QUICK)
def test_the_note_says_what_it_said(name: str) -> None:
    compared(name)


@pytest.mark.slow
@pytest.mark.parametrize("name", names())
def test_every_note_says_what_it_said(name: str) -> None:
    compared(name)


def test_every_demonstration_has_a_snapshot_and_no_other() -> None:
    assert {f.stem for f in FOLDER.glob("*.txt")} == set(names())
