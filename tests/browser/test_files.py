"""What leaves the page: every plot as data and as a drawing, each with its parameters."""

import csv
from pathlib import Path
from xml.etree import ElementTree

import pytest
from playwright.sync_api import Page, expect

from tests.browser.test_topics import PLOTS, drawn, open_topic
from tests.browser.watching import wait_for_plot, wait_for_state
from tests.serving import LiveServer


def _saved(page: Page, act: str, key: str) -> str:
    with page.expect_download() as kept:
        page.locator(f'.panel [data-{act}="{key}"]').click()
    suffix = {"csv": ".csv", "save": ".svg"}[act]
    assert kept.value.suggested_filename.endswith(f"{key}{suffix}")
    return Path(kept.value.path()).read_text(encoding="utf-8")


def _table(text: str) -> tuple[list[str], list[str], list[list[str]]]:
    """Comment lines, heading and rows of a file."""
    lines = text.splitlines()
    comments = [line for line in lines if line.startswith("# ")]
    heading, *rows = csv.reader(lines[len(comments) :])
    assert rows
    assert {len(row) for row in rows} == {len(heading)}
    return comments, heading, rows


def _words(drawing: str) -> str:
    return " ".join(ElementTree.fromstring(drawing).itertext())


@pytest.mark.parametrize("topic", list(PLOTS))
def test_every_plot_of_a_topic_is_saved_as_data_and_as_a_drawing(
    page: Page, done: str, topic: str
) -> None:
    for place, plot in enumerate(PLOTS[topic]):
        if place % 4 == 0:
            # A browser asks a person before it saves more than ten files from one visit.
            page.goto("about:blank")
            open_topic(page, done, topic)
        drawn(page, plot)
        comments, heading, _ = _table(_saved(page, "csv", plot))
        assert "# launch.total_power_mw = 200 mW" in comments, plot
        assert "# ensemble.seed = 101" in comments, plot
        assert any(f"run {done}" in comment for comment in comments), plot
        titles = page.evaluate(
            """(plot) => {
                const { xaxis, yaxis } = document.querySelector(`[data-plot="${plot}"]`).layout;
                return [xaxis.title.text, yaxis.title.text];
            }""",
            plot,
        )
        assert set(titles) <= set(heading), plot
        drawing = _words(_saved(page, "save", plot))
        for words in (*titles, f"run {done}", "launch: total power 200 mW", "width 24 GHz"):
            assert words.split(" − ")[0] in drawing, (plot, words)


def test_the_data_of_the_curve_are_the_values_drawn(page: Page, lab: LiveServer, done: str) -> None:
    page.goto(f"/runs/{done}#variant=0&point=1")
    wait_for_state(page, "Done")
    wait_for_plot(page, "dip")
    _, heading, rows = _table(_saved(page, "csv", "dip"))
    assert heading == [
        "curve",
        "Total power (mW)",
        "C12(0)",
        "standard error",
        "discretization error",
        "limited by",
    ]
    point = lab.get(f"/api/runs/{done}/view")["points"][0][1]
    (row,) = (row for row in rows if row[0] == "coupled" and float(row[1]) == 200.0)
    keys = ("value", "standard_error", "discretization_error")
    assert [float(cell) for cell in row[2:5]] == [point[key] for key in keys]
    assert row[5] == point["limited_by"]
    assert any(row[0] == "coupled, linear regime" for row in rows)


def test_the_sphere_and_the_map_are_saved_too(page: Page, lab: LiveServer, done: str) -> None:
    open_topic(page, done, "polarization")
    page.locator('[data-plot="sphere"]').scroll_into_view_if_needed()
    page.wait_for_timeout(500)
    comments, heading, rows = _table(_saved(page, "csv", "sphere"))
    assert heading[2] == "density (1/sr)"
    stokes = lab.get(f"/api/runs/{done}/points/0/1")["stokes"]
    assert [float(row[2]) for row in rows] == [x for line in stokes["density"] for x in line]
    assert "# receiver.filter = none" in comments
    drawing = _saved(page, "save", "sphere")
    assert drawing.count("<path") > 500
    assert "span 1: length 2 km" in _words(drawing)

    page.evaluate("scrollTo(0, 0)")
    wait_for_plot(page, "map-0")
    _, heading, rows = _table(_saved(page, "csv", "map"))
    axes = lab.get(f"/api/runs/{done}/view")["axes"]["map"]
    assert [float(time) for time in heading[1:]] == axes["time_ps"]
    assert [float(row[0]) for row in rows] == axes["distance_km"]
    assert all(-1.0 <= float(cell) <= 1.0 for cell in rows[-1][1:])
    drawing = _saved(page, "save", "map")
    for words in ("Time (ps)", "Distance (km)", "Contrast", "total power 200 mW"):
        assert words in _words(drawing)


def test_an_overlay_is_saved_with_what_differs(page: Page, done: str, done_too: str) -> None:
    page.goto(f"/overlay?curve={done}:0&curve={done_too}:0")
    expect(page.locator("table[data-differences]")).to_contain_text("Seed")
    wait_for_plot(page, "overlay")
    comments, _, rows = _table(_saved(page, "csv", "overlay"))
    assert "# source.width_ghz (GHz): 24; 30" in " ".join(comments).replace("experiment.", "")
    assert len({row[0] for row in rows if "linear" not in row[0]}) == 2
    assert "Total power (mW)" in _words(_saved(page, "save", "overlay"))
