"""The page as `pkcalc form` starts it, bound to this machine; charts only where a test asks for them."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from pkcalc_form import consultation
from streamlit import config


@pytest.fixture(autouse=True)
def on_this_machine() -> Iterator[None]:
    before = config.get_option("server.address")
    config.set_option("server.address", "127.0.0.1")
    yield
    config.set_option("server.address", before)


@pytest.fixture
def real_charts() -> None:
    """Asked for by a test that looks at the charts."""


@pytest.fixture(autouse=True)
def no_charts(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    """Charts take longer to draw than everything else on the page together."""
    if "real_charts" not in request.fixturenames:
        for name in ("record_chart", "plane_chart", "regimen_chart", "narrowing_chart", "typed_chart"):
            monkeypatch.setattr(consultation.charts, name, lambda *_: None)
