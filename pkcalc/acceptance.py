"""The record of local acceptance: published examples, reference curves and two-way checks, run on this machine."""

from __future__ import annotations

import json
import platform
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version as version_of
from typing import Any

from pkcalc import __version__, selfcheck
from pkcalc.consult import RESULTS_DATE, run_consult
from pkcalc.demos import demonstration, demonstrations
from pkcalc.selfcheck import Row
from pkcalc.sources import source

#: What the numbers depend on; named on the record.
LIBRARIES = ("numpy", "scipy", "pint", "pydantic")


@dataclass(frozen=True)
class Acceptance:
    """Rows with where they were run: versions, machine in words, moment."""

    rows: tuple[Row, ...]
    versions: tuple[tuple[str, str], ...]
    machine: str
    moment: datetime

    @property
    def agreed(self) -> int:
        return sum(r.agrees for r in self.rows)

    @property
    def all_agree(self) -> bool:
        return self.agreed == len(self.rows)


def two_way_rows() -> tuple[Row, ...]:
    """The two-way check of every demonstration case."""
    rows = []
    for entry in demonstrations():
        for r in run_consult(demonstration(entry.name)).second_way:
            rows.append(
                Row(
                    id=f"demonstration {entry.name}",
                    source="own",
                    where=f"two-way check, within {r.tolerance_text}",
                    kind="independent calculation",
                    status="read",
                    quantity=r.quantity,
                    expected=r.second_text,
                    ours=r.first_text,
                    agrees=r.agrees,
                )
            )
    return tuple(rows)


def accept() -> Acceptance:
    """Run everything on this machine."""
    return Acceptance(
        rows=selfcheck.run() + two_way_rows(),
        versions=(
            ("pkcalc", __version__),
            ("results of", RESULTS_DATE),
            ("Python", platform.python_version()),
            *((name, version_of(name)) for name in LIBRARIES),
        ),
        machine=f"{platform.system()} {platform.machine()}",
        moment=datetime.now(UTC).replace(microsecond=0, tzinfo=None),
    )


def heading(record: Acceptance) -> tuple[str, ...]:
    return (
        "Self-check: published examples, reference curves and two-way checks",
        f"{record.agreed} of {len(record.rows)} agree. Run {record.moment:%Y-%m-%d %H:%M} UTC on {record.machine}.",
        ", ".join(f"{name} {v}" for name, v in record.versions) + ".",
        "This checks that the program calculates here as it did when it was released. It does not validate the program "
        "for your patients: local acceptance is your service's own decision.",
    )


def record_text(record: Acceptance) -> str:
    """The table as text."""
    return "\n".join(heading(record)) + "\n\n" + selfcheck.as_text(record.rows)


def record_data(record: Acceptance) -> dict[str, Any]:
    """The record as data for JSON."""
    return {
        "pkcalc_selfcheck": 1,
        "versions": dict(record.versions),
        "machine": record.machine,
        "moment_utc": record.moment.isoformat(),
        **selfcheck.as_data(record.rows),
    }


def record_pdf(record: Acceptance) -> bytes:
    """The record as PDF, to sign and file."""
    from pkcalc.note.pdf import compile_pdf

    keys = dict.fromkeys(r.source for r in record.rows)
    data = {
        "heading": list(heading(record)),
        "versions": f"pkcalc {__version__}, results of {RESULTS_DATE}",
        "rows": [
            [r.id, f"{r.where}", r.quantity.replace("_", " "), r.expected, r.ours, "yes" if r.agrees else "NO"]
            for r in record.rows
        ],
        "sources": [f"{source(k).citation}" for k in keys],
        "signatures": [
            "Run by: ______________________    Date: ______________",
            "Accepted for use by: ______________________    Date: ______________",
        ],
    }
    return compile_pdf("selfcheck.typ", {"note": json.dumps(data, ensure_ascii=False)}, ("9",), moment=record.moment)
