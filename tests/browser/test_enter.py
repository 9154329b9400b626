"""A server shared on a network: the key opens the page, and one of its keys may only look."""

import re
from collections.abc import Iterator
from pathlib import Path

import pytest
from playwright.sync_api import Browser, expect

from tests.serving import LiveServer, tiny


@pytest.fixture
def shared(tmp_path: Path) -> Iterator[LiveServer]:
    """A server on every address of this machine, with fresh keys."""
    live = LiveServer(tmp_path / "data", "--new-access-key", host="0.0.0.0")
    live.start()
    yield live
    live.stop()


def test_the_look_only_key_opens_pages_that_change_nothing(
    browser: Browser, shared: LiveServer
) -> None:
    links = [shared.read_line(), shared.read_line()]
    write, look = (re.search(r"key=(\S+)", line) for line in links)
    assert write
    assert look
    profile = browser.new_context(base_url=shared.url)
    page = profile.new_page()
    page.goto("/library")
    expect(page).to_have_url(re.compile("/enter"))
    entry = page.get_by_label("Access key")
    entry.fill("not the key at all")
    entry.press("Enter")
    expect(page.get_by_role("alert")).to_contain_text("not known here")
    entry.fill(look[1])
    entry.press("Enter")
    expect(page).to_have_url(re.compile(r":\d+/$"))
    expect(page.locator("[data-look-only]")).to_be_visible()
    expect(page.locator("[data-run]")).to_be_disabled()
    assert page.evaluate("fetch('/api/runs', {method: 'POST'}).then((r) => r.status)") == 403
    profile.close()

    profile = browser.new_context(base_url=shared.url)
    page = profile.new_page()
    page.goto(f"/enter?key={write[1]}")
    expect(page.locator("[data-run]")).to_be_enabled()
    status = page.evaluate(
        """(study) => fetch("/api/runs", {
            method: "POST", body: JSON.stringify(study),
            headers: { "Content-Type": "application/json" },
        }).then((response) => response.status)""",
        tiny(401),
    )
    assert status == 201
    profile.close()
