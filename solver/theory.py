"""Closed forms of the linear regime.

The intensities of Gaussian light obey the Gaussian moment theorem (Goodman, Statistical
Optics, ch. 3): cov[I_j(t), I_k(t+τ)] = |Γ_jk(τ)|² with Γ_jk(τ) = ∫ Σ_d M*_jd M_kd e^{2πifτ} df,
for any response M whose component j is Σ_d M_jd n_d.
"""

from dataclasses import dataclass

import numpy as np

from solver.experiment import Experiment
from solver.fibre import linear_response, sections
from solver.grid import Complex, Grid, Real
from solver.receiver import demultiplexing, power_transfer
from solver.relation import input_response


def mutual_coherence(response: Complex) -> Complex:
    """Γ_jk(τ) in W, shape (2, 2, samples), lags in FFT order (0, 1, …, −1 steps)."""
    density = np.einsum("jdf,kdf->jkf", response.conj(), response)
    return np.asarray(np.fft.ifft(density, norm="forward"))


@dataclass(frozen=True)
class LinearCorrelations:
    """Normalized intensity covariances of the linear regime; lags in FFT order.

    auto1, auto2, sum, cross: shape (samples,); moment_cross: ⟨I1 I2⟩/(⟨I1⟩⟨I2⟩) at lag 0.
    """

    auto1: Real
    auto2: Real
    sum: Real
    cross: Real
    moment_cross: float


def linear_correlations(experiment: Experiment, grid: Grid) -> LinearCorrelations:
    """What the receiver would see of this experiment with the Kerr term off."""
    line = sections(
        experiment.line, grid, experiment.source.wavelength_nm, experiment.ensemble.seed
    )
    return _correlations(linear_response(line, input_response(experiment, grid)), experiment, grid)


def launched_central(experiment: Experiment, grid: Grid) -> float:
    """C12(0) that the receiver would see of the launch itself."""
    return float(_correlations(input_response(experiment, grid), experiment, grid).cross[0])


def _correlations(response: Complex, experiment: Experiment, grid: Grid) -> LinearCorrelations:
    """Correlations of light of a response, after the receiver."""
    coherence = mutual_coherence(response)
    mean = coherence[[0, 1], [0, 1], 0].real
    demultiplex = demultiplexing(experiment.receiver)
    covariance = np.einsum("ja,kb,abt->jkt", demultiplex, demultiplex, np.abs(coherence) ** 2)
    transfer = power_transfer(experiment.receiver, np.abs(grid.frequency_thz) * 1e3)
    seen = np.fft.ifft(np.fft.fft(covariance) * transfer).real
    # A component launched without power has no fluctuation to correlate.
    variance = np.maximum(seen[[0, 1], [0, 1], 0], np.finfo(float).tiny)
    total = seen.sum(axis=(0, 1))
    mean = np.maximum(demultiplex @ mean, np.finfo(float).tiny)
    return LinearCorrelations(
        auto1=seen[0, 0] / variance[0],
        auto2=seen[1, 1] / variance[1],
        sum=total / total[0],
        cross=seen[0, 1] / np.sqrt(variance[0] * variance[1]),
        moment_cross=float(1.0 + seen[0, 1, 0] / (mean[0] * mean[1])),
    )
