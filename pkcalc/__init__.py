"""Dosing of drugs with saturable (Michaelis-Menten) elimination: the public names, loaded when first used."""

from __future__ import annotations

import importlib
from typing import Any

__version__ = "0.1.0"

_PUBLIC = {
    "Q": "pkcalc.units",
    "load_case": "pkcalc.case",
    "run_consult": "pkcalc.consult",
    "CaseError": "pkcalc.errors",
    "CannotEstimate": "pkcalc.errors",
    "NoPlan": "pkcalc.errors",
}

__all__ = ["CannotEstimate", "CaseError", "NoPlan", "Q", "load_case", "run_consult"]


def __getattr__(name: str) -> Any:
    if name in _PUBLIC:
        return getattr(importlib.import_module(_PUBLIC[name]), name)
    raise AttributeError(f"module 'pkcalc' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted([*globals(), *_PUBLIC])
