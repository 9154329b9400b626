"""Library, overlay and sessions: finding runs again, comparing them, keeping them together."""

import re

from playwright.sync_api import Page, expect

from tests.browser.watching import until, wait_for_state, wait_for_values
from tests.serving import LiveServer, tiny


def _run(page: Page, run_id: str) -> Page:
    return page.locator(f'[data-run-id="{run_id}"]')  # type: ignore[return-value]


def test_the_library_finds_renames_deletes_and_takes_back(page: Page, lab: LiveServer) -> None:
    run_id = lab.post(tiny(301))
    lab.wait(run_id, "done")
    page.goto("/library")
    row = _run(page, run_id)
    expect(row).to_be_visible()
    title = row.locator(".row-title")
    title.fill("Tuesday, steep wall")
    title.press("Enter")
    page.locator("[data-search]").fill("steep wall")
    expect(page.locator("[data-runs] > li")).to_have_count(1)
    expect(page.locator("[data-count]")).to_have_text("1 run")
    assert lab.get(f"/api/runs/{run_id}")["title"] == "Tuesday, steep wall"
    page.locator("[data-search]").fill("no such words anywhere")
    expect(page.locator("[data-nothing]")).to_contain_text("No run matches")
    page.locator("[data-search]").fill("")
    row.get_by_role("button", name="Delete").click()
    expect(row).to_have_count(0)
    page.locator(".toast").get_by_role("button", name="Undo").click()
    expect(row).to_be_visible()
    picture = row.locator("img")
    until(page, "(image) => image.complete && image.naturalWidth > 0", picture.element_handle())


def test_a_run_started_elsewhere_appears_in_the_library(
    page: Page, lab: LiveServer, done: str
) -> None:
    page.goto("/library")
    expect(_run(page, done)).to_be_visible()
    run_id = lab.post(tiny(302))
    expect(_run(page, run_id)).to_be_visible()
    expect(_run(page, run_id).locator(".state")).to_have_attribute("data-state", "done")


def test_chosen_curves_overlay_and_the_address_keeps_the_choice(
    page: Page, done: str, done_too: str
) -> None:
    page.goto("/library")
    for run_id in (done, done_too):
        row = _run(page, run_id)
        row.get_by_text("Curves for the overlay").click()
        row.get_by_role("checkbox", name="coupled", exact=True).check()
    expect(page.locator("[data-tray-note]")).to_contain_text("2 of at most 8")
    page.locator("[data-tray-go]").click()
    page.wait_for_url(re.compile(rf"/overlay\?curve={done}(:|%3A)0&curve={done_too}(:|%3A)0"))
    buttons = page.locator("[data-legend] button")
    expect(buttons).to_have_count(2)
    for name in buttons.all_inner_texts():
        assert len(wait_for_values(page, "overlay", name.strip(), 2)) == 2
    table = page.locator("[data-differences]")
    expect(table).to_contain_text("Width (GHz)")
    expect(table).to_contain_text("30")
    expect(table).not_to_contain_text("Wavelength")
    page.locator("[data-library-link]").click()
    expect(page.locator("[data-tray-note]")).to_contain_text("2 of at most 8")


def test_a_session_holds_runs_and_notes_at_its_own_link(page: Page, done: str) -> None:
    page.goto("/sessions")
    page.locator("[data-name]").fill("Domains, first week")
    page.get_by_role("button", name="Create").click()
    page.wait_for_url(re.compile(r"/sessions/.+"))
    link = page.url
    page.locator("[data-notes]").fill("The dip deepens.\nAsk about the receiver.")
    expect(page.locator("[data-saved]")).to_have_text("Notes saved.")

    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    page.locator("[data-add-session]").click()
    page.locator("[data-session-pick]").select_option(label="Domains, first week")
    page.locator("[data-session-add]").click()
    expect(page.locator(".toast")).to_contain_text("Added to Domains, first week")

    page.goto(link)
    expect(page.locator("[data-notes]")).to_have_value("The dip deepens.\nAsk about the receiver.")
    row = _run(page, done)
    expect(row).to_be_visible()
    row.get_by_role("button", name="Take out").click()
    expect(row).to_have_count(0)
    page.locator(".toast").get_by_role("button", name="Undo").click()
    expect(row).to_be_visible()

    page.goto("/sessions")
    entry = page.locator("[data-sessions] li", has_text="Domains, first week")
    expect(entry).to_contain_text("1 run")
    entry.get_by_role("button", name="Delete").click()
    expect(entry).to_have_count(0)
    page.locator(".toast").get_by_role("button", name="Undo").click()
    expect(entry).to_be_visible()


def test_notes_survive_leaving_in_the_middle_of_a_sentence(page: Page, lab: LiveServer) -> None:
    session = lab.client.post("/api/sessions", json={"name": "Left early"}).json()
    page.goto(f"/sessions/{session['id']}")
    expect(page.locator("[data-name]")).to_have_value("Left early")
    page.locator("[data-notes]").type("Half a sent")
    page.goto("/sessions")
    page.goto(f"/sessions/{session['id']}")
    expect(page.locator("[data-notes]")).to_have_value("Half a sent")
