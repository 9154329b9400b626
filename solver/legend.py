"""What the columns of a measured spectrum are: units from the caller, the header or the numbers."""

import re
from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np

from solver.columns import Columns, Unreadable
from solver.grid import Real

AxisUnit = Literal["auto", "nm", "um", "m", "THz", "GHz", "MHz", "Hz"]
LevelUnit = Literal["auto", "dBm", "dB", "linear"]
Per = Literal["auto", "wavelength", "frequency"]
Width = Literal["wavelength", "frequency"]


class Unit(NamedTuple):
    """A unit of the axis; scale takes it to nm or to GHz."""

    title: str
    wavelength: bool
    scale: float


AXES: dict[str, Unit] = {
    "nm": Unit("nm", True, 1.0),
    "um": Unit("µm", True, 1e3),
    "m": Unit("m", True, 1e9),
    "THz": Unit("THz", False, 1e3),
    "GHz": Unit("GHz", False, 1.0),
    "MHz": Unit("MHz", False, 1e-3),
    "Hz": Unit("Hz", False, 1e-9),
}


@dataclass(frozen=True)
class Axis:
    """Unit of the first column, and whether it counts from a carrier."""

    unit: str
    offset: bool


_OPTICAL_NM = (300.0, 3000.0)
_OPTICAL_GHZ = (1e5, 1e6)
_LARGEST_OFFSET_GHZ = 3e4
_USUAL_NM = (400.0, 2500.0)
_USUAL_GHZ = (1.2e5, 7.5e5)

_AXIS = re.compile(r"(?<![A-Za-zµμ/])(?:(nm|[µμu]m|THz|GHz|MHz|Hz)(?![A-Za-z])|[\[(](m)[\])])")
_LEVEL = re.compile(
    r"(?<![A-Za-zµμ])((?i:dBm|dBW|dB)|[mµμunp]?W|a\.?u\.?|arb\.?|[Ll]inear)(?![A-Za-z])"
    r"(?:\s*/\s*(nm|THz|GHz|MHz|Hz))?"
)


@dataclass(frozen=True)
class _Legend:
    """What the header says: unit names, the level's own divisor, or None."""

    axis: str | None = None
    level: str | None = None
    per: str | None = None


def _legend(columns: Columns) -> _Legend:
    """The last line of the header that names both units, else the last that names each."""
    axis: _Legend = _Legend()
    level: _Legend = _Legend()
    for line in reversed(columns.header):
        named = _named(line, columns.style.separator)
        if named.axis and named.level:
            return named
        axis = axis if axis.axis else named
        level = level if level.level else named
    return _Legend(axis.axis, level.level, level.per)


def _named(line: str, separator: str | None) -> _Legend:
    cells = line.split(separator) if separator else [line]
    first, rest = (cells[0], separator.join(cells[1:])) if separator and cells[1:] else (line, line)
    axis, level = _AXIS.search(first), _LEVEL.search(rest)
    unit = (axis[1] or axis[2]) if axis else None
    return _Legend(
        re.sub("[µμ]m", "um", unit) if unit else None,
        level[1] if level else None,
        level[2] if level else None,
    )


def _fit(unit: str, x: Real) -> Axis | None:
    """The axis that numbers of a unit make; None when they cannot be of that unit."""
    kind = AXES[unit]
    low, high = float(x.min()) * kind.scale, float(x.max()) * kind.scale
    if kind.wavelength:
        return Axis(unit, False) if _OPTICAL_NM[0] <= low and high <= _OPTICAL_NM[1] else None
    if _OPTICAL_GHZ[0] <= low and high <= _OPTICAL_GHZ[1]:
        return Axis(unit, False)
    return Axis(unit, True) if max(-low, high) < _LARGEST_OFFSET_GHZ else None


def _guess(x: Real) -> Axis | None:
    """The unit in which the numbers are those of usual light, else offsets in GHz about zero."""
    for unit, kind in AXES.items():
        low, high = float(x.min()) * kind.scale, float(x.max()) * kind.scale
        least, most = _USUAL_NM if kind.wavelength else _USUAL_GHZ
        if least <= low and high <= most:
            return Axis(unit, False)
    return _fit("GHz", x) if x.min() < 0.0 < x.max() else None


def recognized_axis(columns: Columns, asked: AxisUnit) -> Axis:
    """What the first column is; adds a remark. Raises Unreadable where that cannot be."""
    x = columns.x
    span = f"from {x.min():.7g} to {x.max():.7g}"
    guess = _guess(x)
    if asked != "auto":
        axis, how = _fit(asked, x), "as asked"
        if axis is None:
            nearest = f": choose {guess.unit}" if guess else ": choose another unit"
            raise Unreadable(
                "axis",
                f"numbers {span} cannot be {_kind_of(asked)} in {AXES[asked].title}"
                f"{nearest}{_outlier(columns, asked)}",
            )
    else:
        said = _legend(columns).axis
        axis, how = (_fit(said, x), "from the header") if said else (None, "")
        if axis is None:
            axis, how = guess, "guessed from the numbers"
            if said and guess:
                how += f", which cannot be the header's {AXES[said].title}"
    if axis is None:
        said = _legend(columns).axis or "nm"
        raise Unreadable(
            "axis",
            f"numbers {span} are no wavelengths or frequencies of light in any unit: choose the "
            f"unit of the axis{_outlier(columns, said)}",
        )
    about = " offset from the carrier" if axis.offset else ""
    columns.remarks.append(f"axis: {_kind_of(axis.unit)}{about} in {AXES[axis.unit].title} ({how})")
    return axis


def _kind_of(unit: str) -> str:
    return "wavelength" if AXES[unit].wavelength else "frequency"


def _outlier(columns: Columns, unit: str) -> str:
    """Names the first line that alone keeps the numbers from being of a unit."""
    typical = _fit(unit, np.sort(columns.x)[columns.x.size // 2 :][:1])
    if typical is None:
        return ""
    for line, value in zip(columns.line, columns.x, strict=True):
        if _fit(unit, np.asarray([value])) != typical:
            return f", or mend line {line}, which has {value:g}"
    return ""


def recognized_level(
    columns: Columns, asked: LevelUnit, axis: Axis, per: Per
) -> tuple[bool, Width]:
    """Whether levels are linear, and in what kind of width they were measured; adds a remark."""
    legend = _legend(columns)
    name: str = asked
    if asked != "auto":
        linear, how = asked == "linear", "as asked"
    elif legend.level:
        name, how = legend.level, "from the header"
        linear = not name.lower().startswith("db")
    else:
        linear = _looks_linear(columns.y)
        name, how = ("linear" if linear else "dBm"), "guessed from the numbers"
    width: Width = "wavelength" if AXES[axis.unit].wavelength else "frequency"
    if per != "auto":
        width = per
    elif legend.per:
        width = "wavelength" if legend.per == "nm" else "frequency"
    law = " (density ∝ level × wavelength²)" if width == "wavelength" else ""
    columns.remarks.append(f"level: {name} ({how}), in a width fixed in {width}{law}")
    return linear, width


def _looks_linear(levels: Real) -> bool:
    """Levels in dB go far below zero; a linear power does so by its noise only."""
    finite = levels[np.isfinite(levels)]
    if finite.size < levels.size:
        return False
    return bool(finite.min() >= -0.1 * max(finite.max(), 0.0) and finite.max() > 0.0)
