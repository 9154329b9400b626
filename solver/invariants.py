"""What the equations keep along a line, and how far fields at its end have drifted from it."""

import math
from collections.abc import Sequence

import numpy as np

from solver.fibre import Section
from solver.findings import Invariants
from solver.grid import Field, Grid, Real
from solver.transforms import resampled


def drifts(
    made: Sequence[Section], launched: Field, arrived: Field, window_ps: float
) -> Invariants:
    """Largest drift over realizations between the launch and the end of a line.

    launched, arrived: √W, shape (realizations, 2, samples), the samples of each its own.
    Energies are held against what loss leaves of them; the momentum Σω|Â|² against the energy
    times the rms angular width; the Hamiltonian

        H = Σ φ_j(ω)|Â_j|² + γ∫ c_self(|A_1|⁴ + |A_2|⁴)/2 + c_cross|A_1 A_2|² dt

    (standard form of coupled Schrödinger equations, e.g. Agrawal, Nonlinear Fiber Optics), φ the
    linear phase per km, against its Kerr part at the launch, or its linear part without one.
    nan where the line does not keep a quantity, and the note says why.
    """
    samples = max(launched.shape[2], arrived.shape[2])
    grid = Grid(samples, window_ps / samples)
    ends = [resampled(field, samples).astype(np.complex128) for field in (launched, arrived)]
    densities = [np.abs(np.fft.fft(field, norm="forward")) ** 2 for field in ends]
    kept, alike = _transmission(made)
    notes = []
    energies = [density.sum(axis=2) for density in densities]
    if any(section.axes is not None for section in made):
        own = [math.nan, math.nan]
        notes.append("turned axes exchange energy between the components")
    else:
        expected = [kept[j] * energies[0][:, j] for j in range(2)]
        own = [_largest(energies[1][:, j], expected[j], expected[j]) for j in range(2)]
    if alike:
        before, after = (energy.sum(axis=1) for energy in energies)
        total = _largest(after, kept[0] * before, kept[0] * before)
        momentum = _momentum_drift(grid, densities, kept[0])
    else:
        total = momentum = math.nan
        notes.append("components of different loss do not keep their sum or the momentum")
    uniform = bool((kept == 1.0).all()) and all(_same(section, made[0]) for section in made)
    if uniform:
        hamiltonian = _hamiltonian_drift(made[0], ends, densities)
    else:
        hamiltonian = math.nan
        notes.append("a line that has loss or is not of one kind keeps no Hamiltonian")
    return Invariants(own[0], own[1], total, momentum, hamiltonian, "; ".join(notes))


def _transmission(made: Sequence[Section]) -> tuple[Real, bool]:
    """Power transmission of each component, shape (2,), and whether they lose alike all along."""
    exponent = np.zeros(2)
    alike = True
    for section in made:
        rate = section.rate.real[:, 0]
        alike = alike and bool(np.isclose(rate[0], rate[1], rtol=1e-12, atol=0.0))
        exponent += 2.0 * rate * section.length_km + 2.0 * math.log(section.joint)
    return np.exp(exponent), alike


def _same(section: Section, other: Section) -> bool:
    return (
        section.axes is None
        and section.kerr_self == other.kerr_self
        and section.kerr_cross == other.kerr_cross
        and not section.rate.real.any()
        and bool(np.array_equal(section.rate, other.rate))
    )


def _largest(found: Real, expected: Real, scale: Real) -> float:
    return float(np.max(np.abs(found - expected) / np.maximum(scale, np.finfo(float).tiny)))


def _momentum_drift(grid: Grid, densities: Sequence[Real], kept: float) -> float:
    both = [density.sum(axis=1) for density in densities]
    before, after = (np.sum(grid.omega * density, axis=1) for density in both)
    spread = np.sum(grid.omega**2 * both[0], axis=1) * both[0].sum(axis=1)
    return _largest(after, kept * before, kept * np.sqrt(spread))


def _hamiltonian_drift(section: Section, ends: Sequence[Field], densities: Sequence[Real]) -> float:
    samples = ends[0].shape[2]
    rate = section.rate.imag
    if rate.shape[1] != samples:
        raise ValueError(f"sections on {rate.shape[1]} samples, fields on {samples}")
    linear = [np.sum(rate * density, axis=(1, 2)) for density in densities]
    kerr = []
    for field in ends:
        p, q = np.moveaxis(np.abs(field) ** 2, 1, 0)
        density = section.kerr_self * (p**2 + q**2) / 2.0 + section.kerr_cross * p * q
        kerr.append(density.mean(axis=1))
    scale = kerr[0] if kerr[0].any() else np.abs(linear[0])
    return _largest(linear[1] + kerr[1], linear[0] + kerr[0], scale)
