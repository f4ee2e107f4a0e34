"""Test set-up: reproducible properties, slow tests on request, one BLAS thread, skips counted."""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import pytest
from hypothesis import HealthCheck, settings

settings.register_profile(
    "plain", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow], database=None
)
settings.load_profile("plain")

_skipped: list[str] = []


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--slow", action="store_true", help="run the long checks too")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Without --slow the long checks are left out of the run, not skipped: a skip always means something."""
    if config.getoption("--slow"):
        return
    left_out = [item for item in items if item.get_closest_marker("slow")]
    if left_out:
        config.hook.pytest_deselected(items=left_out)
        items[:] = [item for item in items if not item.get_closest_marker("slow")]


def pytest_runtest_logreport(report: pytest.TestReport) -> None:
    if report.skipped and not hasattr(report, "wasxfail"):
        _skipped.append(report.nodeid)


def pytest_sessionfinish(session: pytest.Session, exitstatus: int) -> None:
    """Where CI is set, a skipped test is a failure: everything that should run must run."""
    if os.environ.get("CI") and _skipped:
        session.exitstatus = 1


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    if os.environ.get("CI") and _skipped:
        terminalreporter.write_line(f"Skipped though they should have run: {', '.join(_skipped)}", red=True)
