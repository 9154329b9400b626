"""What is shown of a point, topic by topic: the numbers drawn are the server's."""

import re
from typing import Any

import numpy as np
import pytest
from playwright.sync_api import Page, expect

from tests.browser.watching import curves, painted_share, until, wait_for_plot, wait_for_state
from tests.serving import LiveServer, tiny

PLOTS = {
    "correlations": ["cross", "auto", "memory", "difference"],
    "line": ["distance", "powers", "overview"],
    "spectra": ["spectra"],
    "domains": [
        "durations",
        "durations-along",
        "walls-along",
        "durations-sweep",
        "walls-sweep",
        "width-sweep",
    ],
    "polarization": ["contrast", "polarized"],
    "intensities": ["intensity", "quadrature", "moments"],
    "budget": ["errors"],
}


def open_topic(page: Page, run_id: str, topic: str) -> None:
    """A run's page at the last point of its first curve, with a topic open."""
    page.goto(f"/runs/{run_id}#variant=0&point=1")
    wait_for_state(page, "Done")
    page.locator(f'[data-topic="{topic}"]').click()
    expect(page.locator(f'[data-about="{topic}"]')).to_be_visible()


def drawn(page: Page, plot: str) -> dict[str, list[float | None]]:
    """The curves of a plot once it is drawn."""
    page.locator(f'[data-plot="{plot}"]').scroll_into_view_if_needed()
    wait_for_plot(page, plot)
    return curves(page, plot)


@pytest.mark.parametrize("topic", list(PLOTS))
def test_every_plot_of_a_topic_draws_itself(page: Page, done: str, topic: str) -> None:
    open_topic(page, done, topic)
    shown = page.locator(f'[data-about="{topic}"] [data-plot]:visible')
    keys = [box.get_attribute("data-plot") for box in shown.all()]
    assert [key for key in keys if key != "sphere"] == PLOTS[topic]
    for plot in PLOTS[topic]:
        drawn(page, plot)
    expect(page.locator(f'[data-about="{topic}"] [data-instead]')).to_have_count(0)


def test_what_is_drawn_along_the_line_is_what_the_server_found(
    page: Page, lab: LiveServer, done: str
) -> None:
    evolution = lab.get(f"/api/runs/{done}/points/0/1")["evolution"]
    open_topic(page, done, "domains")
    assert drawn(page, "walls-along")["coupled"] == evolution["walls_along"]["value"]
    assert drawn(page, "durations-along")["coupled"] == evolution["duration_along"]["value"]
    page.locator('[data-topic="intensities"]').click()
    moments = drawn(page, "moments")
    assert moments["component 1"] == evolution["second_moment1"]["value"]
    assert moments["component 2"] == evolution["second_moment2"]["value"]
    page.locator('[data-topic="line"]').click()
    powers_mw = [1e3 * power for power in evolution["power1"]["value"]]
    assert drawn(page, "powers")["component 1"] == pytest.approx(powers_mw)


def test_what_is_drawn_against_the_sweep_is_what_the_server_found(
    page: Page, lab: LiveServer, done: str
) -> None:
    details = [lab.get(f"/api/runs/{done}/points/0/{point}") for point in range(2)]
    open_topic(page, done, "domains")
    expected = {
        "walls-sweep": [detail["walls_per_ns"]["value"] for detail in details],
        "durations-sweep": [detail["mean_duration_ps"]["value"] for detail in details],
        "width-sweep": [detail["wall_width_ps"]["value"] for detail in details],
    }
    for plot, values in expected.items():
        drawn(page, plot)
        until(
            page,
            """([plot, values]) => {
                const traces = document.querySelector(`[data-plot="${plot}"]`).data ?? [];
                const trace = traces.find((one) => one.name === "coupled");
                return trace && values.every((value, i) => trace.y[i] === value);
            }""",
            [plot, values],
        )
    assert "coupled, thermal light" in curves(page, "walls-sweep")


def test_intensities_stand_beside_their_references(page: Page, lab: LiveServer, done: str) -> None:
    intensities = lab.get(f"/api/runs/{done}/points/0/1")["intensities"]
    open_topic(page, done, "intensities")
    found = drawn(page, "intensity")
    assert found["exponential"] == intensities["intensity1"]["reference"]
    density = intensities["intensity2"]["density"]
    assert found["component 2"] == [value or None for value in density]
    assert "Gaussian" in drawn(page, "quadrature")


def _picture(page: Page) -> str:
    """The sphere as it is painted."""
    found: str = page.evaluate(
        """() => document.querySelector('[data-plot="sphere"] canvas').toDataURL()"""
    )
    return found


def _is_painted(page: Page) -> None:
    until(page, "() => document.querySelector('[data-plot=\"sphere\"] canvas').width > 300")
    page.wait_for_timeout(200)


def test_the_stokes_sphere_turns_by_keys_by_drag_and_along_its_axes(page: Page, done: str) -> None:
    open_topic(page, done, "polarization")
    sphere = page.locator('[data-plot="sphere"]')
    sphere.scroll_into_view_if_needed()
    _is_painted(page)
    pictures = [_picture(page)]
    sphere.focus()
    page.keyboard.press("ArrowRight")
    expect(sphere).to_have_attribute("data-view", "41 24")
    box = sphere.bounding_box()
    assert box is not None
    page.mouse.move(box["x"] + 120, box["y"] + 140)
    page.mouse.down()
    page.mouse.move(box["x"] + 80, box["y"] + 150, steps=4)
    page.mouse.up()
    expect(sphere).not_to_have_attribute("data-view", "41 24")
    page.wait_for_timeout(100)
    pictures.append(_picture(page))
    for axis, view in {"S1": "0 0", "S2": "90 0", "S3": "0 90"}.items():
        page.locator(f'[data-face="{axis}"]').click()
        expect(sphere).to_have_attribute("data-view", view)
        page.wait_for_timeout(100)
        pictures.append(_picture(page))
    assert len(set(pictures)) == len(pictures)


def test_the_stokes_sphere_tells_the_density_under_the_pointer(
    page: Page, lab: LiveServer, done: str
) -> None:
    density = np.array(lab.get(f"/api/runs/{done}/points/0/1")["stokes"]["density"])
    assert density.shape == (24, 48)
    assert density.sum() * 4.0 * np.pi / density.size == pytest.approx(1.0, rel=1e-4)
    open_topic(page, done, "polarization")
    page.locator('[data-face="S2"]').click()
    sphere = page.locator('[data-plot="sphere"]')
    sphere.scroll_into_view_if_needed()
    _is_painted(page)
    box = sphere.bounding_box()
    assert box is not None
    page.mouse.move(box["x"] + (box["width"] - 74) / 2 + 20, box["y"] + box["height"] / 2 - 30)
    said = page.locator("[data-sphere-readout]")
    expect(said).to_contain_text("/sr")
    text = said.inner_text().replace("−", "-")
    stokes = [float(value) for value in re.findall(r"S\d (-?[\d.]+)", text)]
    assert np.linalg.norm(stokes) == pytest.approx(1.0, abs=0.03)
    assert stokes[1] > 0.8
    row = int((stokes[2] + 1.0) / 2.0 * 24)
    column = int((np.arctan2(stokes[1], stokes[0]) + np.pi) / (2.0 * np.pi) * 48)
    near = density[max(0, row - 1) : row + 2, column - 1 : column + 2]
    told = re.search(r": ([\d.e-]+) /sr", text)
    assert told
    assert np.abs(near - float(told[1])).min() < 1e-3


def test_the_large_map_shows_any_stokes_ratio(page: Page, lab: LiveServer, done: str) -> None:
    page.goto(f"/runs/{done}#variant=0&point=1")
    wait_for_state(page, "Done")
    wait_for_plot(page, "map-0")
    sources = []
    for layer in ("0", "3", "4", "1"):
        page.locator("[data-map-layer]").select_option(layer)
        page.wait_for_timeout(600)
        assert painted_share(page, "map-0") == 1.0
        sources.append(
            page.evaluate(
                "() => document.querySelector('[data-plot=\"map-0\"]').layout.images[0].source"
            )
        )
    assert len(set(sources)) == 4


def test_a_verdict_stands_under_the_curve_and_the_checks_behind_it(
    page: Page, lab: LiveServer, done: str
) -> None:
    detail = lab.get(f"/api/runs/{done}/points/0/1")
    page.goto(f"/runs/{done}#variant=0&point=1")
    wait_for_state(page, "Done")
    verdict = page.locator("[data-verdict]")
    expect(verdict).to_have_text(f"coupled at 200 mW: {detail['budget']['verdict']}")
    texts = page.locator('[data-plot="dip"]')
    wait_for_plot(page, "dip")
    told = texts.evaluate(
        """(box) => {
            const trace = box.data.find(({ name }) => name === "coupled");
            return [trace.customdata[1][3], trace.hovertemplate];
        }"""
    )
    assert told[0] == f"<br>limited by {detail['summary']['limited_by']}"
    assert "%{customdata[3]}" in told[1]
    page.locator('[data-topic="budget"]').click()
    rows = page.locator("table[data-checks] tbody tr")
    expect(rows).to_have_count(len(detail["budget"]["checks"]))
    for check, row in zip(detail["budget"]["checks"], rows.all(), strict=True):
        expect(row).to_contain_text(check["title"][1:])
        expect(row).to_contain_text("holds" if check["ok"] else "fails")
    expect(page.locator("table[data-invariants]")).to_contain_text("Momentum")
    expect(page.locator("table[data-scales]")).to_contain_text("Dispersion length (km)")
    expect(page.locator("table[data-readout]")).to_contain_text("Wall width")
    page.locator('[data-topic="spectra"]').click()
    expect(page.locator("table[data-widths]")).to_contain_text("Coherence time (ps)")


def test_topics_go_by_keyboard_and_stay_in_the_link(page: Page, done: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    page.locator('[data-topic="correlations"]').focus()
    for _ in range(3):
        page.keyboard.press("ArrowRight")
    expect(page.locator('[data-topic="domains"]')).to_be_focused()
    expect(page.locator('[data-about="domains"]')).to_be_visible()
    expect(page.locator('[data-about="correlations"]')).to_be_hidden()
    assert "topic=domains" in page.url
    page.reload()
    expect(page.locator('[data-about="domains"]')).to_be_visible()


def test_two_sweeps_at_once_make_a_map(page: Page, lab: LiveServer) -> None:
    study: dict[str, Any] = tiny(301)
    study["second"] = {
        "parameter": "line.*.length_km",
        "start": 1.0,
        "stop": 3.0,
        "points": 3,
        "spacing": "linear",
    }
    run_id = lab.post(study)
    assert lab.wait(run_id, "done", "failed")["state"] == "done"
    view = lab.get(f"/api/runs/{run_id}/view")
    page.goto(f"/runs/{run_id}#variant=4&topic=line")
    wait_for_state(page, "Done")
    page.locator('[data-plot="surface"]').scroll_into_view_if_needed()
    wait_for_plot(page, "surface")
    z, y = page.evaluate(
        """() => {
            const [{ z, y }] = document.querySelector('[data-plot="surface"]').data;
            return [z, y];
        }"""
    )
    assert y == view["axes"]["second"]["values"]
    # Curve 4 is the second variant at the middle of three lengths.
    assert z == [[point["value"] for point in view["points"][curve]] for curve in (3, 4, 5)]
    expect(page.locator('[data-summary="second"]')).to_contain_text("3 × length, 1 to 3 km")
