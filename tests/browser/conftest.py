"""A real Chromium against a real server; a page that complains fails its test."""

import os
import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, sync_playwright

from tests.browser.watching import Watch
from tests.serving import LiveServer, tiny

FLAGS = [
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]
SETTLE_MS = 20_000


@pytest.fixture(scope="session")
def lab(tmp_path_factory: pytest.TempPathFactory) -> Iterator[LiveServer]:
    """One server for all browser tests: its workers take seconds to start."""
    live = LiveServer(tmp_path_factory.mktemp("lab"))
    live.start()
    yield live
    live.stop()


@pytest.fixture(scope="session")
def browser() -> Iterator[Browser]:
    """The system's Chromium where there is one, else the one that playwright installed."""
    as_root = ["--no-sandbox"] if os.geteuid() == 0 else []
    with sync_playwright() as playwright:
        chromium = playwright.chromium.launch(
            executable_path=shutil.which("chromium"), args=[*FLAGS, *as_root]
        )
        yield chromium
        chromium.close()


@pytest.fixture
def context(browser: Browser, lab: LiveServer, tmp_path: Path) -> Iterator[BrowserContext]:
    """A browser profile of its own, at the server's address."""
    profile = browser.new_context(
        base_url=lab.url, viewport={"width": 1440, "height": 900}, accept_downloads=True
    )
    profile.set_default_timeout(SETTLE_MS)
    yield profile
    profile.close()


@pytest.fixture
def watch(context: BrowserContext) -> Iterator[Watch]:
    """What every page of the profile complained about; anything unexpected fails the test."""
    watching = Watch(context)
    yield watching
    assert watching.complaints == []


@pytest.fixture
def page(context: BrowserContext, watch: Watch) -> Page:
    """A page that is watched."""
    return context.new_page()


@pytest.fixture(scope="session")
def done(lab: LiveServer) -> str:
    """A run of two variants and two points that is done."""
    run_id = lab.post(tiny(101))
    assert lab.wait(run_id, "done", "failed")["state"] == "done"
    return run_id


@pytest.fixture(scope="session")
def done_too(lab: LiveServer) -> str:
    """Another such run, of another seed and source width."""
    study = tiny(102)
    study["experiment"]["source"] = {"width_ghz": 30.0}
    run_id = lab.post(study)
    assert lab.wait(run_id, "done", "failed")["state"] == "done"
    return run_id
