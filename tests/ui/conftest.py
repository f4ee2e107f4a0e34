"""The page as `pkcalc form` starts it: bound to this machine."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from streamlit import config


@pytest.fixture(autouse=True)
def on_this_machine() -> Iterator[None]:
    before = config.get_option("server.address")
    config.set_option("server.address", "127.0.0.1")
    yield
    config.set_option("server.address", before)
