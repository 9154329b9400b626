"""What a page must be for everybody: accessible, readable in both themes, on a phone, on paper."""

from typing import Any

import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Browser, Page, expect

from tests.browser.watching import curves, wait_for_state, wait_for_values
from tests.serving import LiveServer


@pytest.mark.parametrize("theme", ["light", "dark"])
@pytest.mark.parametrize("place", ["/", "run", "/library", "/sessions", "overlay"])
def test_no_serious_accessibility_finding(page: Page, done: str, theme: str, place: str) -> None:
    page.emulate_media(color_scheme=theme)  # type: ignore[arg-type]
    paths = {"run": f"/runs/{done}", "overlay": f"/overlay?curve={done}:0&curve={done}:1"}
    page.goto(paths.get(place, place))
    page.wait_for_timeout(1000)
    page.evaluate("document.querySelectorAll('.stage').forEach((stage) => { stage.open = true; })")
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
    width = page.evaluate("document.documentElement.scrollWidth")
    assert width <= 375


def test_the_first_screen_of_a_run_shows_run_map_and_curve(page: Page, done: str) -> None:
    page.goto(f"/runs/{done}")
    wait_for_state(page, "Done")
    for part in ("[data-run]", '[data-plot="map-0"]', '[data-plot="dip"]'):
        box = page.locator(part).bounding_box()
        assert box is not None
        assert box["y"] + box["height"] <= 900


def test_curves_and_maps_keep_their_promises_about_colour(page: Page) -> None:
    page.goto("/")
    colours: Any = page.evaluate(
        """async () => {
            const script = document.querySelector('script[type="module"]').src;
            const it = await import(new URL("../model/colour.js", script).href);
            const grounds = { light: [255, 255, 255], dark: [0x15, 0x1c, 0x1e] };
            const ratio = (theme, i) => it.contrastRatio(it.variantBytes(theme, i), grounds[theme]);
            const contrasts = Object.keys(grounds).flatMap((theme) =>
                Array.from({ length: 8 }, (_, i) => ratio(theme, i)));
            const pairs = Array.from({ length: 24 }, (_, i) =>
                `${it.variantColour("light", i)} ${it.variantMarker(i)}`);
            return { contrasts, pairs, contrast: it.CONTRAST_MAP, intensity: it.INTENSITY_MAPS };
        }"""
    )
    assert min(colours["contrasts"]) >= 3.0
    assert len(set(colours["pairs"])) == 24
    for table in colours["intensity"]:
        steps = [
            _lightness(b) - _lightness(a) for a, b in zip(table[::8], table[8::8], strict=False)
        ]
        assert min(steps) > 0.0
        assert max(steps) < 1.5 * min(steps)
    signed = [_lightness(colour) for colour in colours["contrast"]]
    assert max(abs(a - b) for a, b in zip(signed, signed[::-1], strict=True)) < 0.02
    middle = colours["contrast"][128]
    assert max(middle) - min(middle) < 12


def _lightness(colour: list[int]) -> float:
    """OKLab lightness of an sRGB colour in bytes (Ottosson 2020)."""
    linear = [x / 255 / 12.92 if x <= 10 else ((x / 255 + 0.055) / 1.055) ** 2.4 for x in colour]
    rows = (
        (0.4122214708, 0.5363325363, 0.0514459929),
        (0.2119034982, 0.6806995451, 0.1073969566),
        (0.0883024619, 0.2817188376, 0.6299787005),
    )
    cones = [sum(a * b for a, b in zip(row, linear, strict=True)) ** (1 / 3) for row in rows]
    return 0.2104542553 * cones[0] + 0.7936177850 * cones[1] - 0.0040720468 * cones[2]


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
    assert "coupled" in curves(page, "durations")
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
