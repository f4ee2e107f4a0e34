"""`pkcalc selfcheck`: the table, its exit status, its JSON and the record it saves."""

from __future__ import annotations

import io
import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from pypdf import PdfReader

from pkcalc import acceptance, selfcheck
from pkcalc.acceptance import Acceptance
from pkcalc.cli import cli


@pytest.fixture(scope="module")
def record() -> Acceptance:
    return acceptance.accept()


def run(monkeypatch: pytest.MonkeyPatch, found: Acceptance, *args: str) -> Any:
    monkeypatch.setattr(acceptance, "accept", lambda: found)
    return CliRunner().invoke(cli, ["selfcheck", *args])


def test_it_runs_the_published_examples_the_curves_and_the_two_ways(record: Acceptance) -> None:
    assert record.all_agree, [r for r in record.rows if not r.agrees]
    ids = {r.id for r in record.rows}
    assert {"mm_reference_curves", "mm_edge_cases", "demonstration clean-pair"} <= ids
    assert {r.id for r in selfcheck.run()} <= ids
    assert dict(record.versions)["pkcalc"]


def test_the_table_names_case_source_expected_ours_and_agreement(
    record: Acceptance, monkeypatch: pytest.MonkeyPatch
) -> None:
    done = run(monkeypatch, record)
    assert done.exit_code == 0
    for word in ("case", "source", "expected", "ours", "agrees", f"{len(record.rows)} of {len(record.rows)} agree."):
        assert word in done.output
    assert "does not validate the program for your patients" in " ".join(done.output.split())


def test_json_holds_the_same(record: Acceptance, monkeypatch: pytest.MonkeyPatch) -> None:
    done = run(monkeypatch, record, "--format", "json")
    data = json.loads(done.stdout)
    assert data["all_agree"] is True
    assert data["of"] == len(record.rows) == len(data["rows"])
    assert data["versions"]["numpy"]


def test_any_miss_is_status_1_and_stands_out(record: Acceptance, monkeypatch: pytest.MonkeyPatch) -> None:
    missed = replace(record, rows=(replace(record.rows[0], agrees=False, ours="99 mg/L"), *record.rows[1:]))
    done = run(monkeypatch, missed)
    assert done.exit_code == 1
    assert "99 mg/L" in done.output
    assert "NO" in done.output
    assert f"{len(record.rows) - 1} of {len(record.rows)} agree." in done.output


def test_the_record_is_saved_as_pdf(record: Acceptance, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = tmp_path / "record.pdf"
    done = run(monkeypatch, record, "--save", str(file))
    assert done.exit_code == 0
    reader = PdfReader(io.BytesIO(file.read_bytes()))
    text = " ".join(" ".join((p.extract_text() or "").split()) for p in reader.pages)
    assert f"{len(record.rows)} of {len(record.rows)} agree. Run {record.moment:%Y-%m-%d %H:%M} UTC" in text
    for name, version in record.versions:
        assert f"{name} {version}" in text
    assert "Accepted for use by:" in text
    assert reader.trailer["/Root"]["/MarkInfo"]["/Marked"]  # type: ignore[index]
    packed = text.replace(" ", "")
    for row in record.rows:
        assert row.id.replace(" ", "") in packed, row.id
