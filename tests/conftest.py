"""Fixtures that every layer's tests may use."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.serving import LiveServer


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[LiveServer]:
    """A server of its own for one module, on a free port of 127.0.0.1."""
    live = LiveServer(tmp_path_factory.mktemp("data"))
    live.start()
    yield live
    live.stop()


@pytest.fixture
def own_server(tmp_path: Path) -> Iterator[LiveServer]:
    """A server for one test that stops, kills or starves it; not started."""
    live = LiveServer(tmp_path / "data")
    yield live
    live.stop()
