"""Power spectra from an analyser, made into sources.

What the file means is taken from the caller, else from its header, else guessed from the
numbers; either way it is reported, as is every change made to the points. What cannot be taken
is refused with its line and with the option that would take it.

An analyser shows power in its resolution bandwidth. Where that is a fixed width Δλ in
wavelength, as on an axis of wavelengths, the power per frequency is P/(c Δλ/λ²) ∝ P λ²; on an
axis of frequencies the bandwidth is taken to be fixed in frequency. Levels per nm or per Hz in
the header say so themselves, and ``per`` overrules all of it.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from solver.columns import Columns, Strays, Unreadable, read_columns
from solver.grid import Real
from solver.legend import (
    AXES,
    Axis,
    AxisUnit,
    LevelUnit,
    Per,
    recognized_axis,
    recognized_level,
)
from solver.sending import MeasuredSpectrum
from solver.units import LIGHT_SPEED_NM_PER_PS

Gaps = Literal["bridge", "refuse"]
Negative = Literal["refuse", "zero"]

MOST_POINTS = 2048
WIDE_GAP = 5.0
"""In units of the median spacing."""
_EDGE_SHARE = 0.05
"""Share of the points at either end from which a noise floor is suggested."""
_SAME_GHZ = 1e-6
_WILD_DB = 1000.0
_WAVELENGTHS_NM = (400.0, 2500.0)


@dataclass(frozen=True)
class Imported:
    """A spectrum ready to be a source.

    wavelength_nm: the carrier that its offsets are counted from; None where the file's axis was
    one of offsets and no carrier was given. floor_db: where a noise floor seems to lie, dB below
    the highest point, to be taken off by asking for it; None where there is none.
    """

    spectrum: MeasuredSpectrum
    wavelength_nm: float | None
    remarks: tuple[str, ...]
    floor_db: float | None


@dataclass
class _Trace:
    """Points on their way: optical frequency in GHz, ascending, and density in any unit."""

    frequency_ghz: Real
    density: Real
    line: np.ndarray
    place: Callable[[float], str]
    remarks: list[str]


def read_spectrum(
    data: bytes | str,
    *,
    axis: AxisUnit = "auto",
    level: LevelUnit = "auto",
    per: Per = "auto",
    wavelength_nm: float | None = None,
    floor_db: float | None = None,
    gaps: Gaps = "bridge",
    negative: Negative = "refuse",
    strays: Strays = "refuse",
    column: int = 2,
    name: str = "",
) -> Imported:
    """Read a power spectrum from the text of a file.

    axis, level, per: what the columns hold; per is the kind of width, in wavelength or in
    frequency, in which the power was measured. wavelength_nm: the carrier; without one it is
    the centre of gravity of the power. floor_db: a noise floor this far below the highest point
    is subtracted. Raises Unreadable.
    """
    columns = read_columns(data, column=column, strays=strays)
    if columns.x.size < 3:
        lost = "".join(f" ({said})" for said in columns.remarks if "left out" in said)
        raise Unreadable(
            "", f"the file holds {columns.x.size} points{lost}: a spectrum needs three or more"
        )
    meaning = recognized_axis(columns, axis)
    linear, kind = recognized_level(columns, level, meaning, per)
    trace = _trace(columns, meaning)
    trace.density = _linear(columns, linear, negative, trace.remarks)
    if kind == "wavelength":
        carrier_ghz = 0.0
        if meaning.offset:
            if wavelength_nm is None:
                raise Unreadable(
                    "wavelength_nm",
                    "power per nm on an axis of offsets needs the carrier: give its wavelength",
                )
            carrier_ghz = _ghz(wavelength_nm)
        # The constant of dλ/df does not matter: the density may be in any unit.
        optical = trace.frequency_ghz + carrier_ghz
        trace.density = trace.density * (optical.mean() / optical) ** 2
    _ordered(trace, meaning)
    _check_gaps(trace, gaps)
    if not trace.density.any():
        raise Unreadable("", "the trace holds no power: no level is above zero")
    trace.density = trace.density / trace.density.max()
    suggested = _floor_db(trace.density)
    if floor_db is not None:
        _take_off(trace, floor_db)
    _trim(trace)
    carrier_nm = _carrier(trace, meaning, wavelength_nm)
    reference = 0.0 if meaning.offset or carrier_nm is None else _ghz(carrier_nm)
    offset, density = _thinned(trace.frequency_ghz - reference, trace.density, trace.remarks)
    if floor_db is None and suggested is not None:
        _mention_floor(offset, density, suggested, trace.remarks)
    _check_ends(density, trace.remarks)
    spectrum = MeasuredSpectrum(
        name=name[:200],
        offset_ghz=tuple(float(value) for value in np.round(offset, 6)),
        density=tuple(float(f"{value:.7g}") for value in density / density.max()),
    )
    return Imported(
        spectrum,
        carrier_nm,
        (*columns.remarks, *trace.remarks),
        suggested if floor_db is None else None,
    )


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _ghz(wavelength_nm: float) -> float:
    return 1e3 * LIGHT_SPEED_NM_PER_PS / wavelength_nm


def _trace(columns: Columns, axis: Axis) -> _Trace:
    """The points at their optical frequencies."""
    unit = AXES[axis.unit]
    scaled = columns.x * unit.scale
    frequency = _ghz(1.0) / scaled if unit.wavelength else scaled

    def place(frequency_ghz: float) -> str:
        value = (
            _ghz(1.0) / frequency_ghz / unit.scale
            if unit.wavelength
            else frequency_ghz / unit.scale
        )
        return f"{value:.7g} {unit.title}"

    return _Trace(frequency, np.empty(0), columns.line, place, [])


def _linear(columns: Columns, linear: bool, negative: Negative, remarks: list[str]) -> Real:
    """Levels on a linear scale, nothing below zero."""
    levels = columns.y
    infinite = np.flatnonzero(np.isinf(levels) & ((levels > 0.0) | linear))
    if infinite.size:
        raise Unreadable("", f"line {columns.line[infinite[0]]}: the level is infinite: mend it")
    if not linear:
        wild = np.flatnonzero(np.isfinite(levels) & (np.abs(levels) > _WILD_DB))
        if wild.size:
            raise Unreadable(
                "level",
                f"line {columns.line[wild[0]]}: a level of {levels[wild[0]]:g} dB is impossible: "
                "mend it, or choose a linear level",
            )
        top = levels.max()
        if not np.isfinite(top):
            return np.zeros_like(levels)
        return np.asarray(10.0 ** ((levels - top) / 10.0))
    levels = levels / max(np.abs(levels).max(), np.finfo(float).tiny)
    below = np.flatnonzero(levels < 0.0)
    if not below.size:
        return np.asarray(levels)
    where = (
        f"line {columns.line[below[0]]}"
        if below.size == 1
        else f"{below.size} lines, the first {columns.line[below[0]]}"
    )
    if negative == "refuse":
        raise Unreadable(
            "negative",
            f"a linear power is negative ({columns.y[below[0]]:g}) on {where}: have negative "
            "powers taken as 0, or choose the level dBm if that is what they are",
        )
    remarks.append(f"negative powers taken as 0 on {where}")
    return np.asarray(np.maximum(levels, 0.0))


def _ordered(trace: _Trace, axis: Axis) -> None:
    """Ascending frequencies, none twice."""
    steps = np.diff(trace.frequency_ghz)
    # The first of the steps that go against the way of the first.
    turn = np.flatnonzero(np.sign(steps) == -np.sign(steps[np.flatnonzero(steps)[:1]].sum()))
    turn = turn[steps[turn] != 0.0]
    if turn.size:
        trace.remarks.append(
            f"the points are out of order from line {trace.line[turn[0] + 1]} on: sorted"
        )
    elif (steps <= 0.0).all() != AXES[axis.unit].wavelength:
        trace.remarks.append("the axis descends: turned round")
    order = np.argsort(trace.frequency_ghz, kind="stable")
    frequency, density = trace.frequency_ghz[order], trace.density[order]
    trace.line = trace.line[order]
    new = np.concatenate([[True], np.diff(frequency) > _SAME_GHZ])
    if not new.all():
        twice = np.flatnonzero(~new)
        starts = np.flatnonzero(new)
        counts = np.diff(np.append(starts, new.size))
        trace.remarks.append(
            f"{_counted(twice.size, 'line')} repeating a place, such as line "
            f"{trace.line[twice].min()} at {trace.place(frequency[twice[0]])}: averaged"
        )
        density = np.add.reduceat(density, starts) / counts
        frequency, trace.line = frequency[starts], trace.line[starts]
    if frequency.size < 3:
        raise Unreadable(
            "axis",
            f"the points lie at {frequency.size} different places only: a spectrum needs three "
            "or more; check the unit of the axis",
        )
    trace.frequency_ghz, trace.density = frequency, density


def _check_gaps(trace: _Trace, gaps: Gaps) -> None:
    frequency, line = trace.frequency_ghz, trace.line
    steps = np.diff(frequency)
    median = float(np.median(steps))
    wide = np.flatnonzero(steps > WIDE_GAP * median * (1 + 1e-9))
    if not wide.size:
        return
    ends = [sorted((i, i + 1), key=lambda place: int(line[place])) for i in wide[:3]]
    shown = "; ".join(
        f"{trace.place(frequency[a])} to {trace.place(frequency[b])} "
        f"(lines {line[a]} and {line[b]})"
        for a, b in ends
    )
    more = f" and {wide.size - 3} more" if wide.size > 3 else ""
    what = f"wider than {WIDE_GAP:g} times the usual spacing of {median:.4g} GHz: {shown}{more}"
    noun = "a gap" if wide.size == 1 else f"{wide.size} gaps"
    if gaps == "refuse":
        raise Unreadable(
            "gaps", f"{noun} {what}: measure it again, or have gaps bridged by straight lines"
        )
    trace.remarks.append(f"{noun} {what}: bridged by straight lines")


def _floor_db(density: Real) -> float | None:
    """Level of the trace's ends below its top where they look like a noise floor, dB."""
    count = max(2, round(_EDGE_SHARE * density.size))
    if density.size < 4 * count:
        return None
    ends = np.concatenate([density[:count], density[-count:]])
    level = float(ends.max())
    # Both ends as high as each other: a floor rather than the flank of a peak.
    low, high = sorted([float(density[:count].mean()), float(density[-count:].mean())])
    if level <= 0.0 or level > 0.1 or low < 0.1 * high:
        return None
    return float(np.floor(-100.0 * np.log10(level)) / 10.0)


def _take_off(trace: _Trace, floor_db: float) -> None:
    floor = 10.0 ** (-floor_db / 10.0)
    before = _power(trace.frequency_ghz, trace.density)
    trace.density = np.maximum(trace.density - floor, 0.0)
    if np.count_nonzero(trace.density) < 3:
        raise Unreadable(
            "floor_db",
            f"a floor {floor_db:g} dB below the highest point leaves fewer than three points: "
            "put it lower",
        )
    kept = _power(trace.frequency_ghz, trace.density) / before
    trace.remarks.append(
        f"a noise floor {floor_db:g} dB below the highest point taken off, "
        f"{100.0 * (1.0 - kept):.3g} % of the power"
    )
    trace.density = trace.density / trace.density.max()


def _power(frequency: Real, density: Real) -> float:
    return float(np.trapezoid(density, frequency))


def _trim(trace: _Trace) -> None:
    """Leave dark ends out, but for one point."""
    lit = np.flatnonzero(trace.density)
    kept = slice(max(lit[0] - 1, 0), lit[-1] + 2)
    if trace.density[kept].size < 3:
        raise Unreadable(
            "", f"only the point on line {trace.line[lit[0]]} holds power: a spectrum needs three"
        )
    trace.frequency_ghz = trace.frequency_ghz[kept]
    trace.density, trace.line = trace.density[kept], trace.line[kept]


def _carrier(trace: _Trace, axis: Axis, asked_nm: float | None) -> float | None:
    """Wavelength of the carrier, nm, to 0.1 pm."""
    frequency, density = trace.frequency_ghz, trace.density
    if axis.offset:
        if asked_nm is None:
            trace.remarks.append("the axis is one of offsets: set the wavelength of the carrier")
        return asked_nm
    weight = density * np.gradient(frequency)
    centre_nm = round(_ghz(1.0) / float((frequency * weight).sum() / weight.sum()), 4)
    if asked_nm is None:
        if not _WAVELENGTHS_NM[0] <= centre_nm <= _WAVELENGTHS_NM[1]:
            raise Unreadable(
                "axis",
                f"the light would lie at {centre_nm:.6g} nm, outside "
                f"{_WAVELENGTHS_NM[0]:g} to {_WAVELENGTHS_NM[1]:g} nm: check the unit of the axis",
            )
        trace.remarks.append(f"carrier at the centre of gravity of the power, {centre_nm:.4f} nm")
        return centre_nm
    if not frequency[0] <= _ghz(asked_nm) <= frequency[-1]:
        raise Unreadable(
            "wavelength_nm",
            f"the carrier, {asked_nm:g} nm, lies outside the light, "
            f"{_ghz(1.0) / frequency[-1]:.6g} to {_ghz(1.0) / frequency[0]:.6g} nm: use "
            f"{centre_nm:.4f} nm, its centre of gravity",
        )
    return asked_nm


def _thinned(offset: Real, density: Real, remarks: list[str]) -> tuple[Real, Real]:
    """At most MOST_POINTS points that hold the same power, by means over equal bins.

    The two outermost points repeat the means of the outermost bins at their outer edges, so that
    straight lines through the points hold exactly the power of the bins.
    """
    if offset.size <= MOST_POINTS:
        return offset, density
    edges = np.linspace(offset[0], offset[-1], MOST_POINTS - 1)
    running = np.concatenate(
        [[0.0], np.cumsum(np.diff(offset) * (density[1:] + density[:-1]) / 2.0)]
    )
    means = np.diff(_integral_at(edges, offset, density, running)) / np.diff(edges)
    means = np.maximum(means, 0.0)
    width = edges[1] - edges[0]
    remarks.append(
        f"{offset.size} points thinned to {MOST_POINTS} by means over {width:.4g} GHz; the power "
        "is the same"
    )
    if np.count_nonzero(means > 0.5 * means.max()) < 8:
        remarks.append(
            "the light is narrower than 8 of these: take a noise floor off, or cut the trace to "
            "the part around the source"
        )
    centres = 0.5 * (edges[1:] + edges[:-1])
    return (
        np.concatenate([edges[:1], centres, edges[-1:]]),
        np.concatenate([means[:1], means, means[-1:]]),
    )


def _integral_at(at: Real, offset: Real, density: Real, running: Real) -> Real:
    """Integral from the first point to others of the straight lines through the points."""
    left = np.clip(np.searchsorted(offset, at, side="right") - 1, 0, offset.size - 2)
    beyond = at - offset[left]
    slope = (density[left + 1] - density[left]) / (offset[left + 1] - offset[left])
    return np.asarray(running[left] + beyond * (density[left] + 0.5 * slope * beyond))


def _mention_floor(offset: Real, density: Real, floor_db: float, remarks: list[str]) -> None:
    above = np.flatnonzero(density > 10.0 ** (-floor_db / 10.0))
    reach = np.abs(offset[[above[0], above[-1]]]).max()
    remarks.append(
        f"the trace reaches {np.abs(offset[[0, -1]]).max():.4g} GHz from the carrier, but stands "
        f"above its ends, {floor_db:g} dB below the top, to {reach:.4g} GHz only: take a noise "
        f"floor of {floor_db:g} dB off, unless that is light"
    )


def _check_ends(density: Real, remarks: list[str]) -> None:
    cut = max(density[0], density[-1]) / density.max()
    if cut > 1e-2:
        remarks.append(
            f"the trace ends {abs(10.0 * np.log10(cut)):.1f} dB below its top: light beyond "
            "its ends is missing"
        )
