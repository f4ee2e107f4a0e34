"""The import layers hold."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[2]


def test_import_layers_hold() -> None:
    command = [
        str(Path(sys.executable).with_name("lint-imports")),
        "--config",
        "pyproject.toml",
        "--no-cache",
    ]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr


def test_no_public_name_equals_a_module_name() -> None:
    import pkcalc

    modules = {p.stem for p in (ROOT / "pkcalc").iterdir() if p.suffix == ".py" or p.is_dir()}
    assert not modules & set(pkcalc.__all__)


def test_top_level_holds_only_what_it_should() -> None:
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False).stdout
    allowed = {
        "README.md",
        "DEVELOPERS.md",
        "pyproject.toml",
        "pkcalc",
        "ui",
        "tests",
        "SAFETY.md",
        "LICENSE",
    }
    top = {line.split("/")[0] for line in listed.splitlines()}
    assert {name for name in top if not name.startswith(".")} <= allowed
