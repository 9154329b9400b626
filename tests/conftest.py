"""Fixtures that every layer's tests may use."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.checks import write_record
from tests.serving import LiveServer


@pytest.fixture(scope="session")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[LiveServer]:
    """The server that tests share, on a free port; each test has seeds of its own."""
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


def pytest_sessionfinish() -> None:
    """Leave the record of the checks against the outside."""
    write_record()
