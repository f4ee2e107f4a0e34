"""What is asked of the plan on the command line: settings that stand in for those of the case file."""

from __future__ import annotations

import difflib
import json
from collections.abc import Callable, Sequence
from typing import Any

from pkcalc.case import Case, check_case
from pkcalc.errors import CaseError, Problem

#: Setting -> the place in the case file it stands in for.
_PLACES: dict[str, tuple[str, ...]] = {
    "shelf": ("plan", "shelf"),
    "products": ("plan", "products"),
    "aim": ("aim",),
    "largest-step": ("plan", "largest_step"),
    "order-by-loss": ("plan", "order_by_loss"),
    "load": ("plan", "load", "form"),
    "load-route": ("plan", "load", "route"),
    "load-aim": ("plan", "load", "aim"),
    "load-at": ("plan", "load", "at"),
    "restart-level": ("plan", "restart_level"),
    "start": ("plan", "start"),
}
_READ: dict[str, Callable[[str], Any]] = {
    "products": lambda text: [p.strip() for p in text.split(",") if p.strip()],
    "order-by-loss": lambda text: {"yes": True, "no": False}.get(text),
}


def with_settings(case: Case, settings: Sequence[str]) -> Case:
    """The case with settings such as "shelf=united-states" or "aim=15 mg/L" in place of its own, checked again.

    Raises CaseError for a setting that is not known, given twice or not readable.
    """
    problems: list[Problem] = []
    data: dict[str, Any] = case.file.model_dump(mode="json", by_alias=True)
    seen: set[str] = set()
    for text in settings:
        name, equals, value = text.partition("=")
        name, value = name.strip(), value.strip()
        known = ", ".join(_PLACES)
        if name not in _PLACES:
            near = difflib.get_close_matches(name, _PLACES, n=1, cutoff=0.5)
            fix = f"Did you mean {near[0]}?" if near else "Choose one of these"
            problems.append(Problem("Plan", f'"{text[:60]}" was given', f"a setting of {known}", fix))
        elif not equals or not value:
            problems.append(Problem(f"Plan, {name}", "no value was given", f"{name}=value", "Add the value"))
        elif name in seen:
            problems.append(Problem(f"Plan, {name}", "it was given twice", "once", "Take one of them out"))
        else:
            seen.add(name)
            read = _READ.get(name, str)(value)
            if read is None:
                problems.append(Problem(f"Plan, {name}", f'"{value[:40]}" was given', "yes or no", "Write one of them"))
            else:
                _put(data, _PLACES[name], read)
    load = data["plan"].get("load")
    if load is not None and not load.get("form"):
        problems.append(Problem("Plan, load", "no form was given", "load=FORM", "Name the form of the load"))
    if problems:
        raise CaseError(problems)
    return check_case(type(case.file).model_validate_json(json.dumps(data)))


def _put(data: dict[str, Any], place: tuple[str, ...], value: Any) -> None:
    for key in place[:-1]:
        if data.get(key) is None:
            data[key] = {}
        data = data[key]
    data[place[-1]] = value
