"""The small dip curve of the Library, drawn by the server as SVG."""

import math
from collections.abc import Sequence
from typing import Any

from solver.experiment import Study

WIDTH, HEIGHT, MARGIN = 160.0, 72.0, 5.0
COLOURS = ("#3b7dd8", "#c8641b", "#2f9e74", "#a04fb8", "#9a7d0a", "#7a7f87")

Summary = dict[str, Any]
Points = dict[tuple[int, int], Summary]
"""Summaries by variant and point."""


def curve_svg(
    sweep_values: Sequence[float], log_axis: bool, curves: Sequence[Sequence[Summary | None]]
) -> str:
    """C12(0) against the sweep, one line per variant, in colours that suit light and dark."""
    positions = [math.log(value) if log_axis else value for value in sweep_values]
    left, right = min(positions), max(positions)
    drawn = [
        [
            (position, float(summary["value"]))
            for position, summary in zip(positions, curve, strict=True)
            if summary is not None and summary.get("value") is not None
        ]
        for curve in curves
    ]
    heights = [height for curve in drawn for _, height in curve]
    low, high = min([-0.1, *heights]), max([0.1, *heights])

    def place(position: float, height: float) -> str:
        across = (position - left) / (right - left) if right > left else 0.5
        x = MARGIN + across * (WIDTH - 2 * MARGIN)
        y = HEIGHT - MARGIN - (height - low) / (high - low) * (HEIGHT - 2 * MARGIN)
        return f"{x:.1f},{y:.1f}"

    zero_y = place(left, 0.0).split(",")[1]
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDTH:g} {HEIGHT:g}" '
        f'width="{WIDTH:g}" height="{HEIGHT:g}">',
        "<title>C12(0) against the swept parameter</title>",
        f'<path d="M{MARGIN:g},{zero_y}H{WIDTH - MARGIN:g}" stroke="#8a8f98" '
        'stroke-width="0.8" stroke-dasharray="3 3" fill="none"/>',
    ]
    for index, curve in enumerate(drawn):
        colour = COLOURS[index % len(COLOURS)]
        points = [place(*point) for point in curve]
        if len(points) > 1:
            parts.append(
                f'<polyline points="{" ".join(points)}" stroke="{colour}" '
                'stroke-width="1.6" stroke-linejoin="round" fill="none"/>'
            )
        for point in points:
            x, y = point.split(",")
            parts.append(f'<circle cx="{x}" cy="{y}" r="1.7" fill="{colour}"/>')
    return "".join([*parts, "</svg>"])


def draw(study: Study, points: Points) -> str:
    """The small curve of a study's points."""
    values = study.sweep.values()
    curves = [
        [points.get((variant, point)) for point in range(len(values))]
        for variant in range(len(study.curves))
    ]
    return curve_svg(values, study.sweep.spacing == "log", curves)
