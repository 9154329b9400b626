"""A line of fibre made ready to march along: where it is cut, how it is stepped and watched."""

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from solver.fibre import Section
from solver.grid import Complex, Field, Grid, Real
from solver.kernels import band_share, kerr_rotation, linear_flow
from solver.schemes import Scheme
from solver.transforms import Transforms, resampled, transforms

OutcomeKind = Literal[
    "completed", "aliased", "non_finite", "under_resolved", "tolerance_not_met", "steps_too_long"
]
Observer = Callable[[int, Field], None]
"""Called with the index of a recorded distance and the field there."""

EDGE = 1 / 16
"""Share of the samples, at each end of the band, that has to stay empty."""
ERROR_CONSTANT = {2: 0.5, 4: 0.04}
"""Measured: error of a run is about this, times W^{p+1}/N^p, W the total weight, N the steps."""
ROUNDED_OFF = 0.3
"""Part of a step that a stretch may be short of what was asked."""


@dataclass(frozen=True)
class Outcome:
    """How a propagation ended, what to do about it, and where along the line it was noticed."""

    kind: OutcomeKind = "completed"
    advice: str = ""
    z_km: float | None = None


COMPLETED = Outcome()


@dataclass(frozen=True)
class Light:
    """What the choice of steps needs to know of the light at the input.

    power_w: self-weighted mean power ⟨P²⟩/⟨P⟩ of both components together.
    density: share of the energy in each frequency bin, shape (samples,).
    """

    power_w: float
    density: Real


@dataclass(frozen=True)
class _Stretch:
    """A part of one section between two borders; ``joint`` is what its end lets through."""

    section: int
    start_km: float
    end_km: float
    recorded: bool
    joint: float = 1.0


@dataclass(frozen=True)
class Piece:
    """Equal steps within one section; ``recorded`` where its end is to be observed, and
    ``joint`` the amplitude that passes there."""

    section: int
    steps: int
    step_km: float
    end_km: float
    recorded: bool
    joint: float = 1.0


class Wave:
    """Fields under way down a line, and a Kerr turn put off until a phase is needed.

    The Kerr flow leaves all powers alone, so the half turn that ends one step waits for the one
    that begins the next. The buffer is shared by all waves of one shape in this process.
    """

    def __init__(self, field: Field) -> None:
        realizations, _, samples = field.shape
        precision = "single" if field.dtype == np.complex64 else "double"
        self.work: Transforms = transforms(realizations, samples, precision)
        self.work.buffer[:] = field
        self._real = np.float32 if precision == "single" else np.float64
        self._rotate = kerr_rotation(self._real)
        self._own = self._other = 0.0

    @property
    def field(self) -> Field:
        """The buffer, √W, (realizations, 2, samples): powers are right, phases once settled."""
        buffer: Field = self.work.buffer
        return buffer

    def turn(self, own: float, other: float) -> None:
        """Put a Kerr turn off, rad/W by the own power and by that of the other component."""
        self._own += own
        self._other += other

    def settle(self) -> None:
        """Carry out what was put off."""
        if self._own or self._other:
            self._rotate(self.work.buffer, self._real(self._own), self._real(self._other))
            self._own = self._other = 0.0

    def kept(self) -> "KeptWave":
        """A copy to come back to."""
        return KeptWave(self.work.buffer.copy(), self._own, self._other)


@dataclass(frozen=True)
class KeptWave:
    """A wave as it was at some distance."""

    field: Field
    own: float
    other: float

    def again(self, samples: int) -> Wave:
        """The wave, on this many samples of its window."""
        wave = Wave(resampled(self.field, samples))
        wave.turn(self.own, self.other)
        return wave


class Track:
    """A line cut at the recorded distances, with the means to choose and take steps on it."""

    def __init__(
        self, made: Sequence[Section], grid: Grid, recorded_km: Sequence[float] = ()
    ) -> None:
        self.grid = grid
        self.sections = made
        self.length_km = sum(section.length_km for section in self.sections)
        self._stretches = list(self._cut([z for z in recorded_km if z > 0.0]))
        self._operators: dict[tuple[Any, ...], tuple[list[Any], int]] = {}

    def _cut(self, recorded_km: Sequence[float]) -> Iterator[_Stretch]:
        """Yield every stretch between two borders."""
        tiny = 1e-9 * self.length_km
        start = border = 0.0
        for index, section in enumerate(self.sections):
            border += section.length_km
            inside = [z for z in recorded_km if start + tiny < z < border - tiny]
            seen_at_border = any(abs(z - border) <= tiny for z in recorded_km)
            for end in inside:
                yield _Stretch(index, start, end, recorded=True)
                start = end
            yield _Stretch(index, start, border, seen_at_border, section.joint)
            start = border

    def weights(self, scheme: Scheme, light: Light) -> Real:
        """Relative number of steps each stretch deserves: ∫ c^{1/(p+1)} dz.

        All zero where the linear and the Kerr flow commute all along, so that any steps are exact.

        A step of length h errs by about c h^{p+1}, with c of the size of nested commutators of
        the linear rate l and the Kerr rate n, c = n l (n + l)^{p−1}. Loss α leaves the Kerr
        term's form alone, so of its commutators only n α^p is there. Steps that err equally
        then have the density c^{1/(p+1)}.
        """
        p = scheme.order
        weights = []
        power = light.power_w
        rates = [_linear_rate(section.rate, light.density) for section in self.sections]
        for stretch in self._stretches:
            section = self.sections[stretch.section]
            length = stretch.end_km - stretch.start_km
            decay = math.exp(-section.attenuation_per_km * length)
            kerr = 0.5 * (section.kerr_self + section.kerr_cross) * power * math.sqrt(decay)
            linear = rates[stretch.section]
            error = kerr * (
                linear * (kerr + linear) ** (p - 1) + abs(section.attenuation_per_km) ** p
            )
            weights.append(length * error ** (1 / (p + 1)))
            power *= decay * stretch.joint**2
        return np.array(weights)

    def pieces(self, weights: Real, steps: float) -> list[Piece]:
        """About ``steps`` steps shared out over the stretches, at least one for each.

        Steps of one section are alike: where their length changes, errors of the splitting that
        cancel between equal steps stay behind (they cost twice the bias of C12(0) at equal work).
        """
        total = float(weights.sum()) or 1.0
        density_per_km = np.zeros(len(self.sections))
        for stretch, weight in zip(self._stretches, weights, strict=True):
            length_km = self.sections[stretch.section].length_km
            density_per_km[stretch.section] += steps * float(weight) / total / length_km
        pieces = []
        for stretch in self._stretches:
            length_km = stretch.end_km - stretch.start_km
            wanted = length_km * float(density_per_km[stretch.section])
            count = max(1, math.ceil(wanted - ROUNDED_OFF))
            pieces.append(
                Piece(
                    stretch.section,
                    count,
                    length_km / count,
                    stretch.end_km,
                    stretch.recorded,
                    stretch.joint,
                )
            )
        return pieces

    def _flows(
        self, piece: Piece, scheme: Scheme, precision: type, guarded: bool
    ) -> tuple[list[Any], int]:
        """Linear operators of the scheme's stages, with the transforms' scale taken out.

        Also the number of bins kept on each side of the carrier. Where the linear phase of one
        whole step reaches π, splitting drives sidebands that are not there (Weideman and Herbst,
        SIAM J. Numer. Anal. 23, 485, 1986); a guarded track keeps clear of them by ending its
        band just below.
        """
        key = (piece.section, piece.step_km, scheme.name, precision, guarded)
        if key not in self._operators:
            rate = self.sections[piece.section].rate
            half = self.grid.samples // 2
            inside = np.ones(self.grid.samples, dtype=bool)
            bins = half
            if guarded:
                phase = np.abs(rate.imag - rate.imag[:, :1]).max(axis=0) * piece.step_km
                inside = phase < 0.95 * math.pi
                outwards = inside[1:half] & inside[:half:-1]
                bins = half if outwards.all() else 1 + int(np.argmin(outwards))
            scaled = inside / self.grid.samples
            made = {
                part: _flow(rate, part * piece.step_km, scaled, precision)
                for part in set(scheme.linear)
            }
            if self.grid.samples * len(self._operators) > 2**22:
                self._operators.clear()
            self._operators[key] = ([made[part] for part in scheme.linear], bins)
        return self._operators[key]

    def march(
        self,
        wave: Wave,
        pieces: Sequence[Piece],
        scheme: Scheme,
        *,
        edge_limit: float,
        guard: float = 0.0,
        observe: Observer | None = None,
        phases: bool = False,
        sparing: bool = False,
        axes: Sequence[Complex | None] | None = None,
    ) -> Outcome:
        """Propagate a wave in place, as far as its outcome allows.

        edge_limit: share of a realization's energy allowed at the edges of the band.
        guard: when positive, end the band where the splitting itself would make sidebands, for
        the long steps of an ensemble that are not checked one by one; the share of energy
        allowed at such an end is edge_limit times this, and ``steps_too_long`` the outcome of more.
        observe: called at recorded distances; one that reads fields, not powers only, asks for
        ``phases``. sparing: look at the spectrum at the end of the last piece only.
        axes: of each section, shape (2, 2) or (realizations, 2, 2), instead of its own.
        """
        buffer, forward, inverse = wave.field, wave.work.forward, wave.work.inverse
        recorded = 0
        for piece in pieces:
            looked_at = not sparing or piece is pieces[-1]
            section = self.sections[piece.section]
            flows, bins = self._flows(piece, scheme, buffer.dtype.type, guard > 0.0)
            limit = edge_limit * (guard if 2 * bins < self.grid.samples else 1.0)
            turn_own = section.kerr_self * piece.step_km
            turn_other = section.kerr_cross * piece.step_km
            turn = section.axes if axes is None else axes[piece.section]
            if turn is not None:
                wave.settle()
                _turn_axes(buffer, turn)
            for step in range(piece.steps):
                for stage, flow in enumerate(flows):
                    wave.turn(scheme.kerr[stage] * turn_own, scheme.kerr[stage] * turn_other)
                    wave.settle()
                    forward()
                    if looked_at and step + 1 == piece.steps and stage + 1 == len(flows):
                        outcome = self._inspect(buffer, bins, limit, piece, guard > 0.0)
                        if outcome.kind != "completed":
                            return outcome
                    linear_flow(buffer, flow)
                    inverse()
                wave.turn(scheme.kerr[-1] * turn_own, scheme.kerr[-1] * turn_other)
            if turn is not None:
                wave.settle()
                _turn_axes(buffer, turn.conj().swapaxes(-1, -2))
            if piece.joint != 1.0:
                wave.settle()
                buffer *= piece.joint
            if piece.recorded:
                recorded += 1
                if phases:
                    wave.settle()
                if observe is not None:
                    observe(recorded, buffer)
        return COMPLETED

    def _inspect(
        self, spectrum: Field, bins: int, edge_limit: float, piece: Piece, guarded: bool
    ) -> Outcome:
        """Whether spectra are finite and keep clear of the edges of the band."""
        share = edge_share(spectrum, bins)
        if share <= edge_limit:
            return COMPLETED
        if math.isnan(share):
            return Outcome(
                "non_finite",
                "the field overflowed: look for an extreme power, nonlinear coefficient or length",
                piece.end_km,
            )
        if 2 * bins < self.grid.samples or (guarded and self._driven(spectrum, share, piece)):
            return Outcome("steps_too_long", "take shorter steps", piece.end_km)
        return Outcome(
            "aliased",
            f"the spectrum reached the edge of its band at {piece.end_km:.3g} km "
            f"(share of the energy there {share:.1e}, allowed {edge_limit:.1e}): "
            f"use at least {2 * self.grid.samples} samples in the same window",
            piece.end_km,
        )

    def _driven(self, spectrum: Field, share: float, piece: Piece) -> bool:
        """Whether what stands at the end of the grid was made by the steps.

        The Kerr phase brings the resonance of the steps inside the phase of π. Light that spreads
        falls off towards the end of the grid; sidebands that the steps drive stand out there.
        """
        half = self.grid.samples // 2
        rate = self.sections[piece.section].rate.imag
        phase = np.abs(rate[:, half] - rate[:, 0]).max() * piece.step_km
        inner = band_share(spectrum, round(half * (1 - 3 * EDGE)), round(half * (1 + 3 * EDGE)))
        return bool(phase > math.pi / 3 and share > inner - share)


def edge_share(spectrum: Field, bins: int) -> float:
    """Largest share of a realization's energy at the edges of a band of ±``bins`` bins.

    spectrum: complex, shape (realizations, 2, samples), FFT order; nan where it is not finite.
    """
    first = bins - max(1, round(bins * EDGE))
    return float(band_share(spectrum, first, spectrum.shape[2] - first))


def expected_steps(weights: Real, scheme: Scheme, tolerance: float) -> float:
    """Number of steps that should meet a field tolerance, from :meth:`Track.weights` alone."""
    p = scheme.order
    return float((ERROR_CONSTANT[p] * float(weights.sum()) ** (p + 1) / tolerance) ** (1 / p))


def _flow(rate: Complex, length_km: float, scale: Real, precision: type) -> Field:
    """exp(rate·length)·scale; real functions take a tenth of the complex one's time."""
    size, phase = np.exp(rate.real * length_km) * scale, rate.imag * length_km
    made: Field = np.empty(rate.shape, dtype=precision)
    made.real, made.imag = size * np.cos(phase), size * np.sin(phase)
    return made


def _linear_rate(rate: Complex, density: Real) -> float:
    """Spread of the linear phase rate over a spectrum, both components, rad/km."""
    mean = (density * rate.imag).sum(axis=1, keepdims=True)
    return math.sqrt(float((density * (rate.imag - mean) ** 2).sum() / 2))


def _turn_axes(field: Field, axes: Complex) -> None:
    """Multiply (realizations, 2, samples) by one matrix, or by one for each realization."""
    entry = axes[..., None].astype(field.dtype)
    first = entry[..., 0, 0, :] * field[:, 0] + entry[..., 0, 1, :] * field[:, 1]
    second = entry[..., 1, 0, :] * field[:, 0] + entry[..., 1, 1, :] * field[:, 1]
    field[:, 0], field[:, 1] = first, second
