"""What can go wrong, and what travels with a result.

    PkcalcError
    ├── CaseError       the input must be mended; carries every problem found, each beside its field
    ├── CannotEstimate  the input is readable, but no number follows from it: what was found, why, what helps
    ├── NoPlan          an estimate exists, but no regimen can be offered from it
    └── DrugFileError   a maintainer's mistake in a drug or site file, raised when it is loaded

Anything else that is raised is a fault of the program: the screen then says that the calculation stopped
and shows no number.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Literal

Severity = Literal["stop", "warn", "note"]

#: What a stop can take away. Nothing else can be blocked. "this regimen" takes away the offer of the one
#: regimen the caution names; its danger numbers stay visible, marked "not offered".
BLOCKABLE = ("two-level", "estimate", "projection", "regimens", "this regimen", "loading", "next level")


@dataclass(frozen=True)
class Problem:
    """One thing wrong with the input: where, what was given, what is allowed, what would mend it."""

    where: str
    given: str
    allowed: str
    fix: str

    @property
    def text(self) -> str:
        parts = [f"{self.where}: {self.given}."]
        if self.allowed:
            parts.append(f"Allowed: {self.allowed}.")
        if self.fix:
            parts.append(self.fix if self.fix.endswith((".", "?")) else self.fix + ".")
        return " ".join(parts)

    def as_dict(self) -> dict[str, str]:
        return {"where": self.where, "given": self.given, "allowed": self.allowed, "fix": self.fix}


def as_typed(text: str, most: int = 40) -> str:
    """What was typed, safe to show in a message: shortened, and without characters that cannot be seen."""
    clean = "".join(c if c.isprintable() else "?" for c in text[: most + 1])
    return clean if len(clean) <= most else clean[:most] + "..."


@dataclass(frozen=True)
class Caution:
    """Something a person must see beside a result, with what it blocks and what would lift it."""

    id: str
    severity: Severity
    text: str
    source: str
    blocks: tuple[str, ...] = ()
    lifted_by: str = ""
    values: Mapping[str, str] = field(default_factory=dict)

    def as_dict(self) -> dict[str, object]:
        return {
            "id": self.id,
            "severity": self.severity,
            "text": self.text,
            "source": self.source,
            "blocks": list(self.blocks),
            "lifted_by": self.lifted_by,
        }


class PkcalcError(Exception):
    """Anything this program refuses on purpose."""


class CaseError(PkcalcError):
    """The input must be mended before anything is calculated. Carries all problems at once."""

    def __init__(self, problems: Problem | Iterable[Problem]) -> None:
        self.problems: tuple[Problem, ...] = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__("\n".join(p.text for p in self.problems))


class CannotEstimate(PkcalcError):  # noqa: N818 - it tells what cannot be done, not what went wrong
    """The input is readable, but the method cannot answer: what was found, why it stops, what would help."""

    def __init__(self, found: str, why: str, helps: str) -> None:
        self.found, self.why, self.helps = found, why, helps
        super().__init__(f"{found} {why} {helps}".strip())


class NoPlan(CannotEstimate):
    """There is an estimate, but no regimen can be offered from it."""


class DrugFileError(PkcalcError):
    """A drug or site file is incomplete or contradictory; found when it is loaded."""
