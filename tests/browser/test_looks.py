"""What a page must be for everybody: accessible, readable in both themes, on a phone, on paper."""

from typing import Any

import numpy as np
import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Browser, Page, expect

from tests.browser.vision import EYES, least_distance, oklab
from tests.browser.watching import curves, wait_for_state, wait_for_values
from tests.serving import LiveServer


@pytest.mark.parametrize("theme", ["light", "dark"])
@pytest.mark.parametrize(
    "place", ["/", "run", "polarization", "budget", "/library", "/sessions", "overlay"]
)
def test_no_serious_accessibility_finding(page: Page, done: str, theme: str, place: str) -> None:
    page.emulate_media(color_scheme=theme)  # type: ignore[arg-type]
    topics = {name: f"/runs/{done}#topic={name}" for name in ("polarization", "budget")}
    paths = topics | {"run": f"/runs/{done}", "overlay": f"/overlay?curve={done}:0&curve={done}:1"}
    page.goto(paths.get(place, place))
    page.wait_for_timeout(1000)
    page.evaluate(
        "document.querySelectorAll('.stage, .rare').forEach((part) => { part.open = true; })"
    )
    report = Axe().run(page).response
    assert len(report["passes"]) > 10
    findings = report["violations"]
    serious = [
        (finding["id"], [node["target"] for node in finding["nodes"]][:4])
        for finding in findings
        if finding["impact"] in ("serious", "critical")
    ]
    assert serious == []


@pytest.mark.parametrize("place", ["/", "run", "/library", "/sessions", "/overlay"])
def test_a_phone_shows_everything_without_scrolling_sideways(
    page: Page, done: str, place: str
) -> None:
    page.set_viewport_size({"width": 375, "height": 740})
    page.goto(f"/runs/{done}" if place == "run" else place)
    if place == "run":
        wait_for_state(page, "Done")
        page.locator('[data-plot="dip"]').scroll_into_view_if_needed()
        wait_for_values(page, "dip", "coupled", 2)
        for topic in page.locator("[data-topic]").all():
            topic.click()
            expect(topic).to_have_attribute("aria-selected", "true")
            assert page.evaluate("document.documentElement.scrollWidth") <= 375
    elif place == "/":
        page.evaluate("document.querySelectorAll('details').forEach((d) => { d.open = true; })")
    assert page.evaluate("document.documentElement.scrollWidth") <= 375


def test_the_first_screen_of_a_run_shows_run_map_and_curve(page: Page, done: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    for part in ("[data-run]", '[data-plot="map-0"]', '[data-plot="dip"]'):
        box = page.locator(part).bounding_box()
        assert box is not None
        assert box["y"] + box["height"] <= 900


@pytest.fixture
def colours(page: Page) -> Any:
    """The page's colours: of variants for each theme, with their contrasts, and of the maps."""
    page.goto("/")
    return page.evaluate(
        """async () => {
            const script = document.querySelector('script[type="module"]').src;
            const it = await import(new URL("../model/colour.js", script).href);
            const grounds = { light: [255, 255, 255], dark: [0x15, 0x1c, 0x1e] };
            const variants = {};
            const ratios = [];
            for (const [theme, ground] of Object.entries(grounds)) {
                variants[theme] = Array.from({ length: 8 }, (_, i) => it.variantBytes(theme, i));
                ratios.push(...variants[theme].map((colour) => it.contrastRatio(colour, ground)));
            }
            const marks = Array.from({ length: 24 }, (_, i) =>
                `${it.variantColour("light", i)} ${it.variantMarker(i)}`);
            const maps = { contrast: it.CONTRAST_MAP, intensity: it.INTENSITY_MAPS };
            return { variants, ratios, marks, ...maps };
        }"""
    )


def test_every_variant_stands_out_from_the_ground_and_from_the_others(colours: Any) -> None:
    assert min(colours["ratios"]) >= 3.0
    assert len(set(colours["marks"])) == 24


@pytest.mark.parametrize("eye", list(EYES))
@pytest.mark.parametrize("theme", ["light", "dark"])
def test_colour_blind_eyes_tell_the_variants_apart(colours: Any, theme: str, eye: str) -> None:
    variants = colours["variants"][theme]
    assert least_distance(variants[:4], eye) > 0.18
    assert least_distance(variants, eye) > 0.08


def test_maps_are_even_in_lightness_and_neutral_in_the_middle(colours: Any) -> None:
    for table in colours["intensity"]:
        steps = np.diff(oklab(table)[::8, 0])
        assert steps.min() > 0.0
        assert steps.max() < 1.5 * steps.min()
    contrast = oklab(colours["contrast"])
    assert np.abs(contrast[:, 0] - contrast[::-1, 0]).max() < 0.02
    assert np.abs(np.diff(contrast[:, 0], 2)).max() < 0.012
    assert np.linalg.norm(contrast[127:129, 1:], axis=1).max() < 0.01


def test_the_theme_chosen_stays_chosen(page: Page) -> None:
    page.goto("/library")
    page.locator("[data-theme-choice]").select_option("dark")
    page.goto("/sessions")
    expect(page.locator("html")).to_have_attribute("data-theme", "dark")
    background = page.evaluate("getComputedStyle(document.body).backgroundColor")
    assert background == "rgb(18, 24, 26)"


def test_paper_gets_the_results_and_not_the_form(page: Page, done: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    wait_for_values(page, "dip", "coupled", 2)
    page.emulate_media(media="print")
    expect(page.locator("[data-study]")).to_be_hidden()
    expect(page.locator(".run-tools")).to_be_hidden()
    expect(page.locator('[data-plot="dip"]')).to_be_visible()
    page.emulate_media(media="screen", color_scheme="dark")
    assert page.pdf(format="A4").startswith(b"%PDF")
    assert "coupled" in curves(page, "cross")
    expect(page.locator("html")).to_have_attribute("data-theme", "auto")


def test_a_page_is_usable_within_a_second_on_a_warm_cache(
    browser: Browser, lab: LiveServer
) -> None:
    profile = browser.new_context(base_url=lab.url)
    page = profile.new_page()
    times = []
    for _ in range(4):
        page.goto("/")
        page.wait_for_selector("[data-run]:not([disabled])")
        times.append(page.evaluate("performance.now()"))
    profile.close()
    assert min(times[1:]) < 1000.0


def test_numbers_are_read_and_written_as_people_do(page: Page) -> None:
    page.goto("/")
    found = page.evaluate(
        """async () => {
            const script = document.querySelector('script[type="module"]').src;
            const it = await import(new URL("../model/quantities.js", script).href);
            const sweep = { title: "Total power", unit: "mW", values: [1, 10, 100] };
            return {
                errors: [[-0.12345, 0.0123], [1234.5, 20], [null, 1]].map(
                    (x) => it.withError(...x)),
                read: ["1e-3", "−2,5", "12 km", "", "1e999"].map(it.parseNumber),
                brief: [0.00001234, 1234567, -0.5, 0, NaN].map((x) => it.brief(x)),
                axis: it.sweepAxis({ ...sweep, parameter: it.POWER_PATH }, "dBm"),
            };
        }"""
    )
    assert found["errors"] == ["−0.123 ± 0.012", "1235 ± 20", "–"]
    assert found["read"] == [0.001, -2.5, None, None, None]
    assert found["brief"] == ["1.234e−5", "1.235e6", "−0.5", "0", "–"]
    assert found["axis"]["values"] == [0, 10, 20]
    assert found["axis"]["logarithmic"] is False
