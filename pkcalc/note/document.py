"""The consult note as a document: page one, annex and the block to paste, independent of how it is printed."""

from __future__ import annotations

from dataclasses import dataclass

from pkcalc import __version__
from pkcalc.consult import Consult
from pkcalc.entries import standing, standing_words
from pkcalc.errors import Caution
from pkcalc.note.annex import annex, estimate_lines
from pkcalc.note.front import page_one, paste_block
from pkcalc.note.words import (
    DEFERS,
    DEMONSTRATION,
    NO_STEADY_STATE,
    OVERDOSE,
    Section,
    Table,
    days_words,
    demonstration_words,
    forecast_heads,
    forecast_row,
    level_words,
    told_up_to,
)

__all__ = [
    "DEFERS",
    "DEMONSTRATION",
    "NO_STEADY_STATE",
    "OVERDOSE",
    "Document",
    "Section",
    "Table",
    "compose",
    "days_words",
    "estimate_lines",
    "forecast_heads",
    "forecast_row",
    "level_words",
    "told_up_to",
]


@dataclass(frozen=True)
class Document:
    """The whole note. front: page one. sections: the annex. paste: plain ASCII for a record."""

    title: str
    demonstration: str
    urgent: str
    cautions: tuple[Caution, ...]
    front: tuple[Section, ...]
    sections: tuple[Section, ...]
    paste: tuple[str, ...]
    reentry: str
    reentry_open: bool
    signatures: tuple[str, ...]
    defers: str
    versions: str

    @property
    def footer(self) -> tuple[str, ...]:
        return (self.defers, self.versions, self.reentry, *self.signatures)


def compose(consult: Consult) -> Document:
    """Consult -> note, cautions first."""
    case = consult.case
    return Document(
        title=f"Consult note: {consult.profile.name}",
        demonstration=demonstration_words(consult),
        urgent=f"{consult.profile.urgent} {OVERDOSE}".strip(),
        cautions=consult.cautions,
        front=page_one(consult),
        sections=annex(consult),
        paste=paste_block(consult),
        reentry=standing_words(case),
        reentry_open=standing(case) in ("not resolved", "void"),
        signatures=(
            "Prepared by: ______________________    Time: ______________",
            "Independently checked by: _________________    Time: ______________",
        ),
        defers=DEFERS,
        versions=f"pkcalc {__version__}, results of {consult.results_date}, case {case.hash}, "
        f"drug file {consult.profile.sha256[:12]}"
        + (f", site file {consult.site.sha256[:12]}" if consult.site.sha256 else ""),
    )
