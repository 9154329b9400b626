"""The work–precision diagram, as an SVG file written by hand."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from html import escape

Curve = Sequence[tuple[float, float]]
"""(work, error) pairs."""

_WIDTH, _HEIGHT = 420, 300
_LEFT, _TOP, _BELOW = 70, 70, 60
_COLOURS = ("#1f5f8b", "#b3541e", "#2f7d4f", "#7a4b9a", "#111111")


@dataclass(frozen=True)
class Row:
    """Two panels of one case: the same errors against transforms and against time in ms."""

    title: str
    by_transforms: Mapping[str, Curve]
    by_time: Mapping[str, Curve]


def _decades(values: Sequence[float]) -> tuple[int, int]:
    return math.floor(math.log10(min(values))), math.ceil(math.log10(max(values)))


def _superscript(power: int) -> str:
    return "10" + str(power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))


def _text(x: float, y: float, words: str, anchor: str = "middle", more: str = "") -> str:
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}"{more}>{escape(words)}</text>'


def _panel(
    curves: Mapping[str, Curve], work: str, corner: tuple[float, float], switch: float
) -> list[str]:
    """One panel: error downwards in decades against work; ``switch`` is drawn across."""
    points = [point for curve in curves.values() for point in curve]
    first, last = _decades([x for x, _ in points])
    low, high = _decades([y for _, y in points])
    left, top = corner

    def at(x: float, y: float) -> tuple[float, float]:
        across = (math.log10(x) - first) / (last - first)
        up = (math.log10(y) - low) / (high - low)
        return left + across * _WIDTH, top + (1.0 - up) * _HEIGHT

    parts = [
        f'<rect x="{left}" y="{top}" width="{_WIDTH}" height="{_HEIGHT}" '
        'fill="none" stroke="#888"/>'
    ]
    bottom = top + _HEIGHT
    for power in range(first, last + 1):
        x, _ = at(10.0**power, 10.0**low)
        parts.append(f'<path d="M{x:.1f} {top}V{bottom}" stroke="#ddd"/>')
        parts.append(_text(x, bottom + 18, _superscript(power)))
    for power in range(low, high + 1):
        _, y = at(10.0**first, 10.0**power)
        parts.append(f'<path d="M{left} {y:.1f}h{_WIDTH}" stroke="#ddd"/>')
        parts.append(_text(left - 6, y + 4, _superscript(power), "end"))
    _, y = at(10.0**first, switch)
    parts.append(f'<path d="M{left} {y:.1f}h{_WIDTH}" stroke="#000" stroke-dasharray="5 4"/>')
    parts.append(_text(left + 6, y + 15, "order 2 above, 4 below", "start"))
    for colour, curve in zip(_COLOURS, curves.values(), strict=False):
        places = [at(x, y) for x, y in sorted(curve)]
        path = "L".join(f"{x:.1f} {y:.1f}" for x, y in places)
        parts.append(f'<path d="M{path}" fill="none" stroke="{colour}" stroke-width="2"/>')
        size = 3 if len(places) > 1 else 6
        parts += [
            f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{size}" fill="{colour}"/>' for x, y in places
        ]
    parts.append(_text(left + _WIDTH / 2, bottom + 38, work))
    return parts


def drawn(title: str, rows: Sequence[Row], switch: float, remarks: Sequence[str]) -> str:
    """SVG: a row of panels for each case, the names of the curves, then the remarks."""
    right = 2 * _LEFT + _WIDTH
    pitch = _HEIGHT + _TOP + _BELOW
    names = list(rows[0].by_time)
    foot = 40 + pitch * len(rows)
    width, height = right + _WIDTH + 30, foot + 20 * (len(names) + len(remarks)) + 20
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" '
        'font-family="sans-serif" font-size="13">',
        f'<rect width="{width}" height="{height}" fill="#fff"/>',
        _text(width / 2, 26, title, more=' font-size="16"'),
    ]
    for place, row in enumerate(rows):
        top = 40 + _TOP + pitch * place
        parts.append(_text(_LEFT, top - 30, row.title, "start", ' font-weight="bold"'))
        parts.append(_text(_LEFT, top - 10, "relative error of the field", "start"))
        parts += _panel(row.by_transforms, "Fourier transforms of the field", (_LEFT, top), switch)
        parts += _panel(row.by_time, "processor time, ms", (right, top), switch)
    for colour, name in zip(_COLOURS, names, strict=False):
        foot += 20
        parts.append(f'<path d="M{_LEFT} {foot - 4}h30" stroke="{colour}" stroke-width="3"/>')
        parts.append(_text(_LEFT + 40, foot, name, "start"))
    for remark in remarks:
        foot += 20
        parts.append(_text(_LEFT, foot, remark, "start"))
    return "\n".join([*parts, "</svg>", ""])
