"""Listening to what pages complain about, and reading what their plots draw."""

import time
from typing import Any

from playwright.sync_api import BrowserContext, ConsoleMessage, Page, WebError, expect


class Watch:
    """Console errors, policy violations and uncaught exceptions of a browser profile."""

    def __init__(self, context: BrowserContext) -> None:
        self.complaints: list[str] = []
        self._expected: list[str] = []
        context.on("console", self._console)
        context.on("weberror", self._uncaught)

    def expect(self, text: str) -> None:
        """Take complaints that contain this text as part of the test."""
        self._expected.append(text)

    def _add(self, complaint: str) -> None:
        if not any(text in complaint for text in self._expected):
            self.complaints.append(complaint)

    def _console(self, message: ConsoleMessage) -> None:
        if message.type in ("error", "warning"):
            self._add(f"{message.text} ({message.location.get('url', '')})")

    def _uncaught(self, error: WebError) -> None:
        self._add(str(error.error))


def until(page: Page, condition: str, argument: Any = None, timeout_s: float = 20.0) -> None:
    """Wait until a function of the page returns something true.

    The library's own waiting evaluates text inside the page, which the pages' policy forbids.
    """
    end_s = time.monotonic() + timeout_s
    while not page.evaluate(condition, argument):
        assert time.monotonic() < end_s, condition
        page.wait_for_timeout(50)


def wait_for_plot(page: Page, plot: str) -> None:
    """Wait until a plot has drawn something."""
    until(
        page,
        """(plot) => {
            const box = document.querySelector(`[data-plot="${plot}"]`);
            return box.data?.length > 0 || box.layout?.images?.length > 0;
        }""",
        plot,
    )


def state(page: Page) -> Any:
    """The word that tells the run's state."""
    return page.locator("[data-state-word]")


def wait_for_state(page: Page, word: str, timeout_ms: float = 60_000) -> None:
    """Wait until the page tells that its run is in a state."""
    expect(state(page)).to_have_text(word, timeout=timeout_ms)


def curves(page: Page, plot: str) -> dict[str, list[float | None]]:
    """The values that a plot draws, by the name of the curve."""
    found: dict[str, list[float | None]] = page.evaluate(
        """(plot) => {
            const traces = document.querySelector(`[data-plot="${plot}"]`).data ?? [];
            const named = traces.filter((trace) => trace.name);
            return Object.fromEntries(named.map((trace) => [trace.name, Array.from(trace.y)]));
        }""",
        plot,
    )
    return found


def wait_for_values(page: Page, plot: str, name: str, count: int) -> list[float]:
    """Wait until a curve of a plot has so many values; the values."""
    until(
        page,
        """([plot, name, count]) => {
            const traces = document.querySelector(`[data-plot="${plot}"]`).data ?? [];
            const trace = traces.find((one) => one.name === name);
            return trace && Array.from(trace.y).filter((y) => y !== null).length >= count;
        }""",
        [plot, name, count],
    )
    return [value for value in curves(page, plot)[name] if value is not None]


def painted_share(page: Page, plot: str) -> float:
    """The share of an evolution map that has been painted."""
    share: float = page.evaluate(
        """async (plot) => {
            const { layout } = document.querySelector(`[data-plot="${plot}"]`);
            const source = layout?.images?.[0]?.source;
            if (!source) return 0;
            const image = new Image();
            image.src = source;
            await image.decode();
            const canvas = document.createElement("canvas");
            canvas.width = image.width;
            canvas.height = image.height;
            const pen = canvas.getContext("2d", { willReadFrequently: true });
            pen.drawImage(image, 0, 0);
            const { data } = pen.getImageData(0, 0, canvas.width, canvas.height);
            let opaque = 0;
            for (let i = 3; i < data.length; i += 4) opaque += data[i] === 255;
            return opaque / (data.length / 4);
        }""",
        plot,
    )
    return share
