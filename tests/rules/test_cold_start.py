"""The command line starts light: asking for help imports no heavy library."""

from __future__ import annotations

import subprocess
import sys

HEAVY = ("scipy", "pandas", "pint", "streamlit", "numpy", "altair", "typst", "pydantic")


def loaded_after(code: str) -> set[str]:
    script = f"import sys\n{code}\nprint(*sorted({{m.split('.')[0] for m in sys.modules}}))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    return set(done.stdout.strip().splitlines()[-1].split())


def test_help_imports_nothing_heavy() -> None:
    code = "from pkcalc.cli import cli\ntry:\n    cli.main(['--help'])\nexcept SystemExit:\n    pass"
    assert loaded_after(code) & set(HEAVY) == set()


def test_importing_the_package_imports_nothing_heavy() -> None:
    assert loaded_after("import pkcalc") & set(HEAVY) == set()


def test_the_pair_command_leaves_the_slow_imports_out() -> None:
    code = (
        "from pkcalc.cli import cli\n"
        "try:\n    cli.main(['pair','--form','sodium','--dose','300 mg/day','--level','8 mg/L',"
        "'--dose','350 mg/day','--level','20 mg/L','--weight','70 kg'])\nexcept SystemExit:\n    pass"
    )
    heavy = {"pandas", "streamlit", "altair", "typst", "vl_convert"}
    loaded = loaded_after(code)
    assert "numpy" in loaded
    assert loaded & heavy == set()
