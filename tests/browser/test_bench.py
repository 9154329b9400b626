"""The main job in a browser: press Run, watch the answer draw itself, come back to it."""

import json
import re
import signal
from pathlib import Path

import h5py
import httpx
import numpy as np
import pytest
from playwright.sync_api import BrowserContext, Page, expect

from tests.browser.watching import (
    Watch,
    curves,
    painted_share,
    state,
    until,
    wait_for_plot,
    wait_for_state,
    wait_for_values,
)
from tests.serving import LiveServer, lengthy


def _set(page: Page, stage: str, path: str, text: str) -> None:
    section = page.locator(f'[data-stage="{stage}"]')
    if section.get_attribute("open") is None:
        section.locator("summary").first.click()
    page.locator(f'[data-path="{path}"]').fill(text)


def test_the_headline_study_at_a_reduced_ensemble_draws_itself(
    page: Page, lab: LiveServer, tmp_path: Path
) -> None:
    page.goto("/")
    expect(state(page)).to_have_text("Nothing run yet")
    expect(page.locator("[data-empty]")).to_contain_text("Press Run")
    _set(page, "ensemble", "experiment.ensemble.standard_error_target", "0.1")
    _set(page, "ensemble", "experiment.ensemble.min_realizations", "4")
    _set(page, "ensemble", "experiment.ensemble.samples", "8192")
    _set(page, "sweep", "sweep.points", "4")
    page.locator("[data-run]").click()
    page.wait_for_url(re.compile(r"/runs/[0-9a-f]{16}"))
    wait_for_plot(page, "dip")
    wait_for_state(page, "Done")

    run_id = page.url.split("/runs/")[1].split("#")[0]
    view = lab.get(f"/api/runs/{run_id}/view")
    for variant, row in zip(view["variants"], view["points"], strict=True):
        drawn = wait_for_values(page, "dip", variant["name"], 4)
        assert drawn == [point["value"] for point in row]
    coupled, uncoupled = (
        curves(page, "dip")["derivative"],
        curves(page, "dip")["derivative, coupling off"],
    )
    assert coupled[-1] is not None
    assert uncoupled[-1] is not None
    assert coupled[-1] < -0.2
    assert uncoupled[-1] > 0.0
    wait_for_plot(page, "map-0")
    for plot in ("map-0", "map-1", "map-2"):
        assert painted_share(page, plot) == 1.0

    page.locator('[data-plot="cross"]').scroll_into_view_if_needed()
    until(
        page,
        """() => {
            const traces = document.querySelector('[data-plot="cross"]').data ?? [];
            return traces.some(({ name }) => name === "derivative, linear regime");
        }""",
    )

    with page.expect_download() as kept:
        page.locator('[data-download="result"]').click()
    kept.value.save_as(tmp_path / "result.h5")
    with h5py.File(tmp_path / "result.h5") as file:
        assert len(file) > 0
    with page.expect_download() as kept:
        page.locator('[data-download="csv"]').click()
    assert "derivative" in Path(kept.value.path()).read_text(encoding="utf-8")
    with page.expect_download() as kept:
        page.locator(".run-tools [data-save='dip']").click()
    drawing = Path(kept.value.path()).read_text(encoding="utf-8")
    assert drawing.startswith("<svg")
    assert "independent" in drawing


def test_rows_of_the_map_and_points_of_the_curve_arrive_while_the_run_goes_on(
    page: Page, lab: LiveServer
) -> None:
    run_id = lab.post(lengthy(201))
    page.goto(f"/runs/{run_id}")
    wait_for_state(page, "Running")
    wait_for_values(page, "dip", "coupled", 1)
    bar = page.locator("[data-progress]")
    expect(bar).to_be_visible()
    before = page.locator("[data-status-text]").inner_text()
    expect(page.locator("[data-status-text]")).not_to_have_text(before)

    page.reload()
    wait_for_state(page, "Running")
    wait_for_values(page, "dip", "coupled", 1)
    wait_for_plot(page, "map-0")
    after = page.locator("[data-status-text]").inner_text()
    expect(page.locator("[data-status-text]")).not_to_have_text(after)

    page.locator("[data-cancel]").click()
    expect(state(page)).to_have_text("Cancelled", timeout=4000)
    expect(page.locator("[data-status-text]")).to_contain_text("is kept")
    page.locator("[data-resume]").click()
    expect(state(page)).to_have_text(re.compile("Queued|Running"))
    wait_for_state(page, "Running")
    page.locator("[data-cancel]").click()
    wait_for_state(page, "Cancelled")


def test_a_link_opens_to_the_same_view_in_a_second_window(
    page: Page, context: BrowserContext, done: str
) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    page.get_by_role("button", name="uncoupled", exact=True).click()
    page.locator("[data-pick-variant]").select_option("1")
    page.locator("[data-pick-point]").fill("0")
    page.locator("[data-pick-distance]").fill("2")
    expect(page.locator("[data-pick-distance-value]")).to_have_text("1 km")

    second = context.new_page()
    second.goto(page.url)
    wait_for_state(second, "Done")
    expect(second.locator("[data-pick-variant]")).to_have_value("1")
    expect(second.locator("[data-pick-point-value]")).to_have_text("10 mW")
    expect(second.locator("[data-pick-distance-value]")).to_have_text("1 km")
    expect(second.get_by_role("button", name="uncoupled", exact=True)).to_have_attribute(
        "aria-pressed", "false"
    )
    wait_for_values(second, "dip", "coupled", 2)
    assert "uncoupled" not in curves(second, "dip")


def test_sliders_move_the_curve_to_another_distance(page: Page, lab: LiveServer, done: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    wait_for_values(page, "dip", "coupled", 2)
    page.locator("[data-pick-distance]").fill("1")
    details = [lab.get(f"/api/runs/{done}/points/0/{point}") for point in range(2)]
    expected = [detail["distance"]["value"][1] for detail in details]
    until(
        page,
        """(expected) => {
            const traces = document.querySelector('[data-plot="dip"]').data;
            const y = Array.from(traces.find((trace) => trace.name === "coupled").y);
            return y.every((value, i) => value === expected[i]);
        }""",
        expected,
    )


def test_the_map_tells_what_is_under_the_pointer(page: Page, lab: LiveServer, done: str) -> None:
    page.goto(f"/runs/{done}#variant=0&point=1")
    wait_for_state(page, "Done")
    wait_for_plot(page, "map-0")
    page.locator('[data-plot="map-0"] .nsewdrag').hover()
    readout = page.locator("[data-map-readout]")
    expect(readout).to_contain_text("contrast")
    found = re.match(r"([\d.]+) ps, ([\d.]+) km: contrast (−?[\d.]+)", readout.inner_text())
    assert found
    axes = lab.get(f"/api/runs/{done}/view")["axes"]["map"]
    body = lab.client.get(f"/api/runs/{done}/maps/0/1")
    shape = -1, int(body.headers["X-Map-Rows"]), int(body.headers["X-Map-Columns"])
    counts = np.frombuffer(body.content, np.uint8).reshape(shape)
    column = np.abs(np.array(axes["time_ps"]) - float(found[1])).argmin()
    row = np.abs(np.array(axes["distance_km"]) - float(found[2])).argmin()
    painted, table = page.evaluate(
        """async ([row, column]) => {
            const script = document.querySelector('script[type="module"]').src;
            const { CONTRAST_MAP } = await import(new URL("../model/colour.js", script).href);
            const image = new Image();
            image.src = document.querySelector('[data-plot="map-0"]').layout.images[0].source;
            await image.decode();
            const canvas = document.createElement("canvas");
            [canvas.width, canvas.height] = [image.width, image.height];
            const pen = canvas.getContext("2d");
            pen.drawImage(image, 0, 0);
            const { data } = pen.getImageData(column, image.height - 1 - row, 1, 1);
            return [Array.from(data.slice(0, 3)), CONTRAST_MAP];
        }""",
        [int(row), int(column)],
    )
    assert painted == table[counts[0, row, column]]
    told = float(found[3].replace("−", "-"))
    assert told == pytest.approx(2.0 * counts[0, row, column] / 255.0 - 1.0, abs=0.006)


def test_flagged_and_capped_points_are_told_and_never_drawn(page: Page, lab: LiveServer) -> None:
    study = lengthy(202)
    study["experiment"]["ensemble"] |= {"samples": 256, "max_realizations": 8}
    study["sweep"] |= {"start": 1.0, "stop": 20_000.0, "points": 2}
    run_id = lab.post(study)
    assert lab.wait(run_id, "done")["problems"] > 0
    page.goto(f"/runs/{run_id}")
    wait_for_state(page, "Done")
    flagged = lab.get(f"/api/runs/{run_id}/view")["points"][0][1]
    assert flagged["outcome"] != "completed"
    remarks = page.locator(".remarks[data-remarks]")
    expect(remarks).to_contain_text("not drawn as a value")
    expect(remarks).to_contain_text(flagged["advice"][1:])
    expect(remarks).to_contain_text("stopped at the cap of 8 realizations")
    wait_for_values(page, "dip", "coupled", 1)
    assert curves(page, "dip")["coupled"][1] is None


def test_keyboard_alone_runs_a_study_and_moves_through_it(page: Page, done: str) -> None:
    page.goto("/")
    page.wait_for_selector("[data-run]:not([disabled])")
    for _ in range(40):
        page.keyboard.press("Tab")
        if page.evaluate("document.activeElement.hasAttribute('data-run')"):
            break
    assert page.evaluate("document.activeElement.hasAttribute('data-run')")
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    slider = page.locator("[data-pick-point]")
    slider.focus()
    page.keyboard.press("Home")
    expect(page.locator("[data-pick-point-value]")).to_have_text("10 mW")
    page.keyboard.press("ArrowRight")
    expect(page.locator("[data-pick-point-value]")).to_have_text("200 mW")
    curve = page.get_by_role("button", name="coupled", exact=True)
    curve.focus()
    page.keyboard.press("Space")
    expect(curve).to_have_attribute("aria-pressed", "false")
    page.locator("body").press("Control+Enter")
    wait_for_state(page, "Done")


def test_an_unknown_run_is_told_of(page: Page, watch: Watch) -> None:
    watch.expect("404")
    page.goto("/runs/0123456789abcdef")
    expect(page.locator(".toast")).to_contain_text("no run at this address")
    expect(state(page)).to_have_text("Nothing run yet")


def test_going_back_leads_to_the_run_before(page: Page, done: str, done_too: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    page.goto(f"/runs/{done_too}")
    wait_for_state(page, "Done")
    width = page.locator('[data-path="experiment.source.width_ghz"]')
    expect(width).to_have_value("30")
    page.go_back()
    expect(width).to_have_value("24")


def test_a_study_file_goes_out_and_comes_in_again(page: Page, done: str, tmp_path: Path) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    page.get_by_text("Study file").click()
    with page.expect_download() as kept:
        page.locator("[data-export]").click()
    kept.value.save_as(tmp_path / "study.json")
    study = json.loads((tmp_path / "study.json").read_text(encoding="utf-8"))
    assert study["experiment"]["ensemble"]["samples"] == 512
    page.goto("/")
    page.locator("[data-import-file]").set_input_files(tmp_path / "study.json")
    expect(page.locator('[data-summary="ensemble"]')).to_contain_text("512 × 2 ps")
    page.wait_for_selector("[data-run]:not([disabled])")
    page.locator("[data-run]").click()
    page.wait_for_url(f"**/runs/{done}*")


def test_the_curve_over_power_and_distance_at_once(page: Page, lab: LiveServer, done: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    page.locator('[data-topic="line"]').click()
    page.locator('[data-plot="overview"]').scroll_into_view_if_needed()
    values = [lab.get(f"/api/runs/{done}/points/0/{p}")["distance"]["value"] for p in range(2)]
    until(
        page,
        """(values) => {
            const z = document.querySelector('[data-plot="overview"]').data?.[0]?.z;
            return z && values.every((row, x) => row.every((value, y) => z[y][x] === value));
        }""",
        values,
    )


def test_the_difference_from_the_first_variant(page: Page, lab: LiveServer, done: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    page.locator('[data-plot="difference"]').scroll_into_view_if_needed()
    first, second = lab.get(f"/api/runs/{done}/view")["points"]
    drawn = wait_for_values(page, "difference", "uncoupled", 2)
    assert drawn == [point["difference"]["value"] for point in second]
    for value, one, other in zip(drawn, second, first, strict=True):
        assert other["difference"] is None
        # Not to the digit: the light at the launch corrects a difference and its ends apart.
        if one["realizations"] == other["realizations"] == one["difference"]["realizations"]:
            error = one["difference"]["standard_error"]
            assert value == pytest.approx(one["value"] - other["value"], abs=0.5 * error)


def test_a_page_survives_the_server_being_killed_and_started_again(
    context: BrowserContext, watch: Watch, own_server: LiveServer
) -> None:
    watch.expect("net::ERR_")
    # A point found since the last checkpoint is gone, and asked for until the view is read again.
    watch.expect("status of 404")
    own_server.start()
    page = context.new_page()
    run_id = own_server.post(lengthy(203))
    page.goto(f"{own_server.url}/runs/{run_id}")
    wait_for_values(page, "dip", "coupled", 1)
    port = own_server.url.rpartition(":")[2]
    own_server.signal(signal.SIGKILL)
    expect(page.locator("[data-broken]")).to_be_visible()
    own_server.stop()
    own_server.client = httpx.Client(timeout=30.0)
    own_server.start("--port", port)
    expect(page.locator("[data-broken]")).to_be_hidden(timeout=30_000)
    own_server.wait(run_id, "running")
    before = page.locator("[data-status-text]").inner_text()
    expect(page.locator("[data-status-text]")).not_to_have_text(before)
    wait_for_state(page, "Running")
    page.locator("[data-cancel]").click()
    wait_for_state(page, "Cancelled")
