"""A line of fibre made ready to march along: where it is cut, how it is stepped and watched."""

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from solver.experiment import Precision, Span
from solver.fibre import sections
from solver.grid import Complex, Field, Grid, Real
from solver.kernels import band_energy, kerr_rotation, linear_flow
from solver.schemes import Scheme
from solver.transforms import COMPLEX, Transforms

OutcomeKind = Literal[
    "completed", "aliased", "non_finite", "under_resolved", "tolerance_not_met", "steps_too_long"
]
Observer = Callable[[int, Field], None]
"""Called with the index of a recorded distance and the field there."""

EDGE = 1 / 16
"""Share of the samples, at each end of the band, that has to stay empty."""
ERROR_CONSTANT = {2: 0.5, 4: 0.3}
"""Measured: error of a run is about this, times W^{p+1}/N^p, W the total weight, N the steps."""


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
class Piece:
    """Equal steps within one section; ``recorded`` where its end is to be observed."""

    section: int
    steps: int
    step_km: float
    end_km: float
    recorded: bool


class Track:
    """A line cut at the recorded distances, with the means to choose and take steps on it."""

    def __init__(
        self,
        line: Sequence[Span],
        grid: Grid,
        *,
        wavelength_nm: float,
        recorded_km: Sequence[float] = (),
        fibre_seed: int = 0,
    ) -> None:
        self.grid = grid
        self.sections = sections(line, grid, wavelength_nm, fibre_seed)
        self.length_km = sum(section.length_km for section in self.sections)
        self._stretches = list(self._cut([z for z in recorded_km if z > 0.0]))
        self._operators: dict[tuple[Any, ...], tuple[list[Any], int]] = {}
        self._weighed: tuple[Scheme, Light, Real] | None = None

    def _cut(self, recorded_km: Sequence[float]) -> Iterator[tuple[int, float, float, bool]]:
        """Yield (section, start, end, recorded) of every stretch between two borders."""
        tiny = 1e-9 * self.length_km
        start = border = 0.0
        for index, section in enumerate(self.sections):
            border += section.length_km
            inside = [z for z in recorded_km if start + tiny < z < border - tiny]
            seen_at_border = any(abs(z - border) <= tiny for z in recorded_km)
            for end, recorded in [*((z, True) for z in inside), (border, seen_at_border)]:
                yield index, start, end, recorded
                start = end

    def weights(self, scheme: Scheme, light: Light) -> Real:
        """Relative number of steps each stretch deserves: ∫ c^{1/(p+1)} dz.

        A step of length h errs by about c h^{p+1}, with c of the size of nested commutators of
        the linear rate l and the Kerr rate n, c = n l (n + l)^{p−1}. Loss α leaves the Kerr
        term's form alone, so of its commutators only n α^p is there. Steps that err equally
        then have the density c^{1/(p+1)}.
        """
        if self._weighed and self._weighed[0] is scheme and self._weighed[1] is light:
            return self._weighed[2]
        p = scheme.order
        weights = []
        power = light.power_w
        rates = [_linear_rate(section.rate, light.density) for section in self.sections]
        for index, start, end, _ in self._stretches:
            section = self.sections[index]
            decay = math.exp(-section.attenuation_per_km * (end - start))
            kerr = 0.5 * (section.kerr_self + section.kerr_cross) * power * math.sqrt(decay)
            linear = rates[index]
            error = kerr * (linear * (kerr + linear) ** (p - 1) + section.attenuation_per_km**p)
            weights.append((end - start) * error ** (1 / (p + 1)))
            power *= decay
        self._weighed = scheme, light, np.array(weights)
        return self._weighed[2]

    def commutes(self, scheme: Scheme, light: Light) -> bool:
        """Whether linear and Kerr flow commute all along, so that any steps are exact."""
        return not self.weights(scheme, light).any()

    def expected_steps(self, scheme: Scheme, light: Light, tolerance: float) -> float:
        """Number of steps that should meet a tolerance, from the light at the input alone."""
        p = scheme.order
        total = float(self.weights(scheme, light).sum())
        return float((ERROR_CONSTANT[p] * total ** (p + 1) / tolerance) ** (1 / p))

    def pieces(self, scheme: Scheme, light: Light, steps: float) -> list[Piece]:
        """About ``steps`` steps shared out over the line, at least one for each stretch."""
        weights = self.weights(scheme, light)
        total = float(weights.sum()) or 1.0
        pieces = []
        for (section, start, end, recorded), weight in zip(self._stretches, weights, strict=True):
            count = max(1, round(steps * float(weight) / total))
            pieces.append(Piece(section, count, (end - start) / count, end, recorded))
        return pieces

    def _flows(
        self, piece: Piece, scheme: Scheme, precision: Precision, guarded: bool
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
            made = {
                part: (np.exp(rate * (part * piece.step_km)) * inside / self.grid.samples).astype(
                    COMPLEX[precision]
                )
                for part in set(scheme.linear)
            }
            if self.grid.samples * len(self._operators) > 2**22:
                self._operators.clear()
            self._operators[key] = ([made[part] for part in scheme.linear], bins)
        return self._operators[key]

    def march(
        self,
        work: Transforms,
        pieces: Sequence[Piece],
        scheme: Scheme,
        precision: Precision,
        *,
        edge_limit: float,
        guard: float = 0.0,
        observe: Observer | None = None,
        phases: bool = False,
    ) -> Outcome:
        """Propagate ``work.buffer`` in place, as far as its outcome allows.

        edge_limit: share of a realization's energy allowed at the edges of the band.
        guard: when positive, end the band where the splitting itself would make sidebands, for
        the long steps of an ensemble that are not checked one by one; the share of energy
        allowed at such an end is edge_limit times this, and ``steps_too_long`` the outcome of more.

        The Kerr turn that ends one step is put off until the next one, or until a phase is
        needed: it leaves all powers alone. An observer of fields, not of powers only, asks for
        ``phases``.
        """
        real = np.float32 if precision == "single" else np.float64
        rotate = kerr_rotation(real)
        buffer = work.buffer
        own = other = 0.0

        def settle() -> None:
            nonlocal own, other
            if own or other:
                rotate(buffer, real(own), real(other))
                own = other = 0.0

        recorded = 0
        for piece in pieces:
            section = self.sections[piece.section]
            flows, bins = self._flows(piece, scheme, precision, guard > 0.0)
            limit = edge_limit * (guard if 2 * bins < self.grid.samples else 1.0)
            turn_own = section.kerr_self * piece.step_km
            turn_other = section.kerr_cross * piece.step_km
            if section.axes is not None:
                settle()
                _turn_axes(buffer, section.axes)
            for step in range(piece.steps):
                for stage, flow in enumerate(flows):
                    own += scheme.kerr[stage] * turn_own
                    other += scheme.kerr[stage] * turn_other
                    settle()
                    work.forward()
                    if step + 1 == piece.steps and stage + 1 == len(flows):
                        outcome = self._inspect(buffer, bins, limit, piece.end_km)
                        if outcome.kind != "completed":
                            return outcome
                    linear_flow(buffer, flow)
                    work.inverse()
                own += scheme.kerr[-1] * turn_own
                other += scheme.kerr[-1] * turn_other
            if section.axes is not None:
                settle()
                _turn_axes(buffer, section.axes.conj().T)
            if piece.recorded:
                recorded += 1
                if phases:
                    settle()
                if observe is not None:
                    observe(recorded, buffer)
        settle()
        return COMPLETED

    def _inspect(self, spectrum: Field, bins: int, edge_limit: float, z_km: float) -> Outcome:
        """Whether spectra are finite and keep clear of the edges of the band."""
        total = band_energy(spectrum, 0, self.grid.samples)
        if not np.isfinite(total).all():
            return Outcome(
                "non_finite",
                "the field overflowed: look for an extreme power, nonlinear coefficient or length",
                z_km,
            )
        share = self.edge_share(spectrum, total, bins)
        if share > edge_limit and 2 * bins < self.grid.samples:
            return Outcome("steps_too_long", "take shorter steps", z_km)
        if share > edge_limit:
            return Outcome(
                "aliased",
                f"the spectrum reached the edge of its band at {z_km:.3g} km "
                f"(share of the energy there {share:.1e}, allowed {edge_limit:.1e}): "
                f"use at least {2 * self.grid.samples} samples in the same window",
                z_km,
            )
        return COMPLETED

    def edge_share(self, spectrum: Field, total: Real, bins: int) -> float:
        """Largest share of a realization's energy at the edges of a band of ±``bins`` bins."""
        first = bins - max(1, round(bins * EDGE))
        edge = band_energy(spectrum, first, self.grid.samples - first)
        return float(np.max(edge / np.maximum(total, np.finfo(float).tiny)))


def _linear_rate(rate: Complex, density: Real) -> float:
    """Spread of the linear phase rate over a spectrum, both components, rad/km."""
    mean = (density * rate.imag).sum(axis=1, keepdims=True)
    return math.sqrt(float((density * (rate.imag - mean) ** 2).sum() / 2))


def _turn_axes(field: Field, axes: Complex) -> None:
    first = axes[0, 0] * field[:, 0] + axes[0, 1] * field[:, 1]
    second = axes[1, 0] * field[:, 0] + axes[1, 1] * field[:, 1]
    field[:, 0], field[:, 1] = first, second
