"""The work–precision diagram, as an SVG file written by hand."""

import math
from collections.abc import Mapping, Sequence
from html import escape

Curve = Sequence[tuple[float, float]]
"""(work, error) pairs."""

_WIDTH, _HEIGHT = 420, 360
_LEFT, _TOP = 70, 60
_COLOURS = ("#1f5f8b", "#b3541e", "#2f7d4f", "#7a4b9a", "#555555")


def _decades(values: Sequence[float]) -> tuple[int, int]:
    return math.floor(math.log10(min(values))), math.ceil(math.log10(max(values)))


def _superscript(power: int) -> str:
    return "10" + str(power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))


def _text(x: float, y: float, words: str, anchor: str = "middle", more: str = "") -> str:
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}"{more}>{escape(words)}</text>'


def _panel(curves: Mapping[str, Curve], work: str, left: float, switch: float) -> list[str]:
    """One panel: error downwards in decades against work; ``switch`` is drawn across."""
    points = [point for curve in curves.values() for point in curve]
    first, last = _decades([x for x, _ in points])
    low, high = _decades([y for _, y in points])

    def at(x: float, y: float) -> tuple[float, float]:
        across = (math.log10(x) - first) / (last - first)
        up = (math.log10(y) - low) / (high - low)
        return left + across * _WIDTH, _TOP + (1.0 - up) * _HEIGHT

    parts = [
        f'<rect x="{left}" y="{_TOP}" width="{_WIDTH}" height="{_HEIGHT}" '
        'fill="none" stroke="#888"/>'
    ]
    bottom = _TOP + _HEIGHT
    for power in range(first, last + 1):
        x, _ = at(10.0**power, 10.0**low)
        parts.append(f'<path d="M{x:.1f} {_TOP}V{bottom}" stroke="#ddd"/>')
        parts.append(_text(x, bottom + 18, _superscript(power)))
    for power in range(low, high + 1):
        _, y = at(10.0**first, 10.0**power)
        parts.append(f'<path d="M{left} {y:.1f}h{_WIDTH}" stroke="#ddd"/>')
        parts.append(_text(left - 6, y + 4, _superscript(power), "end"))
    _, y = at(10.0**first, switch)
    parts.append(f'<path d="M{left} {y:.1f}h{_WIDTH}" stroke="#000" stroke-dasharray="5 4"/>')
    parts.append(_text(left + _WIDTH - 6, y - 5, "order chosen: 2 above, 4 below", "end"))
    for colour, curve in zip(_COLOURS, curves.values(), strict=False):
        places = [at(x, y) for x, y in sorted(curve)]
        path = "L".join(f"{x:.1f} {y:.1f}" for x, y in places)
        parts.append(f'<path d="M{path}" fill="none" stroke="{colour}" stroke-width="2"/>')
        parts += [f'<circle cx="{x:.1f}" cy="{y:.1f}" r="3" fill="{colour}"/>' for x, y in places]
    parts.append(_text(left + _WIDTH / 2, bottom + 40, work))
    return parts


def drawn(
    title: str, by_transforms: Mapping[str, Curve], by_time: Mapping[str, Curve], switch: float
) -> str:
    """SVG of two panels: field error against transforms, and against time in ms."""
    right = 2 * _LEFT + _WIDTH
    width, height = right + _WIDTH + 30, _TOP + _HEIGHT + 60 + 20 * len(by_time)
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" '
        'font-family="sans-serif" font-size="13">',
        f'<rect width="{width}" height="{height}" fill="#fff"/>',
        _text(width / 2, 24, title, more=' font-size="16"'),
        *_panel(by_transforms, "Fourier transforms of the field", _LEFT, switch),
        *_panel(by_time, "processor time, ms", right, switch),
        _text(_LEFT, _TOP - 10, "relative error of the field", "start"),
    ]
    for row, (colour, name) in enumerate(zip(_COLOURS, by_time, strict=False)):
        y = _TOP + _HEIGHT + 62 + 20 * row
        parts.append(f'<path d="M{_LEFT} {y - 4}h30" stroke="{colour}" stroke-width="3"/>')
        parts.append(_text(_LEFT + 40, y, name, "start"))
    return "\n".join([*parts, "</svg>", ""])
