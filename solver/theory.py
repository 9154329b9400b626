"""Closed forms of the linear regime.

The intensities of Gaussian light obey the Gaussian moment theorem (Goodman, Statistical
Optics, ch. 3): cov[I_j(t), I_k(t+τ)] = |Γ_jk(τ)|² with Γ_jk(τ) = ∫ Σ_d M*_jd M_kd e^{2πifτ} df,
for any response M whose component j is Σ_d M_jd n_d.

Where each realization travels a fibre of its own the light is Gaussian fibre by fibre. The
covariance then is the mean over fibres of |Γ_jk(τ)|², and that of the mean powers of the fibres,
which is the same at every lag. The fibres of the first FIBRES realizations stand for all, so
this closed form has a statistical error of its own.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from solver.amplifier import bandpass, emission_w_per_thz, saturated_gain
from solver.experiment import Experiment, Span
from solver.fibre import drawn_axes, fibres_are_drawn, linear_response, sections
from solver.grid import Complex, Grid, Real
from solver.receiver import (
    demultiplexing,
    is_noisy,
    noise_of,
    noise_variance,
    power_transfer,
)
from solver.relation import input_response

KEPT_SAMPLES = 2**14
"""Closed forms on grids up to this size are kept for the next point that asks for them."""
FIBRES = 64
"""Fibres over which the closed forms are averaged where each realization has its own."""


def mutual_coherence(response: Complex) -> Complex:
    """Γ_jk(τ) in W, shape (…, 2, 2, samples), lags in FFT order (0, 1, …, −1 steps).

    response: √W, shape (…, 2 components, draws, samples).
    """
    density = np.einsum("...jdf,...kdf->...jkf", response.conj(), response)
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


def emission_w_per_thz_at_input(experiment: Experiment, grid: Grid) -> float:
    """Spontaneous emission of the preamplifier over its gain, W/THz in each polarization."""
    amplifier = experiment.preamplifier
    if amplifier.noise_figure_db is None:
        return 0.0
    arriving = arriving_response(experiment, grid)
    arriving_w = float(np.sum(np.abs(arriving) ** 2)) / len(arriving)
    gain = saturated_gain(amplifier, arriving_w)
    return emission_w_per_thz(amplifier, gain, experiment.source.wavelength_nm) / gain


def received_response(experiment: Experiment, response: Complex, grid: Grid) -> Complex:
    """Response at the demultiplexer: what arrived, a preamplifier's emission, the band-pass.

    Referred to the preamplifier's input, so that it leaves the signal as it is. Shape (…, 2, draws,
    samples), with two draws more for the emission.
    """
    emitted = emission_w_per_thz_at_input(experiment, grid)
    if emitted:
        added = np.zeros((*response.shape[:-3], 2, 2, grid.samples), dtype=np.complex128)
        added[..., 0, 0, :] = added[..., 1, 1, :] = np.sqrt(emitted / grid.window_ps)
        response = np.concatenate([response, added], axis=-2)
    return np.asarray(response * bandpass(experiment.preamplifier, grid))


def received_powers_w(experiment: Experiment, grid: Grid) -> Real:
    """Mean powers of the two components at the demultiplexer with the Kerr term off, W.

    Shape (2,). The Kerr effect leaves them alone as long as it exchanges no energy between the
    components.
    """
    response = received_response(experiment, arriving_response(experiment, grid), grid)
    return np.asarray(np.sum(np.abs(response) ** 2, axis=(2, 3)).mean(axis=0))


def mean_powers_w(experiment: Experiment, grid: Grid) -> Real:
    """The same powers in the two arms of the demultiplexer, W; shape (2,)."""
    return np.asarray(demultiplexing(experiment.receiver) @ received_powers_w(experiment, grid))


def arriving_response(experiment: Experiment, grid: Grid) -> Complex:
    """Response at the end of the line with the Kerr term off; (fibres, 2, draws, samples).

    One fibre, or those of the first FIBRES realizations where each has its own. Not to be written
    to: all who look at the same light share it.
    """
    if grid.samples > KEPT_SAMPLES:
        return _arriving_response(experiment, grid)
    return _kept_response(experiment.light, grid)


def _arriving_response(experiment: Experiment, grid: Grid) -> Complex:
    launched = input_response(experiment, grid)[None]
    seed, wavelength_nm = experiment.ensemble.seed, experiment.source.wavelength_nm
    if not fibres_are_drawn(experiment):
        return linear_response(sections(experiment.line, grid, wavelength_nm, seed), launched)
    fitting = max(2, 2**20 // grid.samples)  # a matrix for each frequency of each is kept
    count = min(FIBRES, fitting, experiment.ensemble.max_realizations)
    matrices = _fibre_matrices(experiment.line, grid, wavelength_nm, seed, count)
    return np.asarray(np.einsum("rjkf,kdf->rjdf", matrices, launched[0]))


_kept_response = lru_cache(maxsize=2)(_arriving_response)


@lru_cache(maxsize=4)
def _fibre_matrices(
    line: Sequence[Span], grid: Grid, wavelength_nm: float, seed: int, count: int
) -> Complex:
    """Jones matrices of drawn fibres, (fibres, 2, 2, samples); all points of a sweep share them."""
    unit = np.zeros((1, 2, 2, grid.samples), dtype=np.complex128)
    unit[0, 0, 0] = unit[0, 1, 1] = 1.0
    made = sections(line, grid, wavelength_nm, seed)
    # One by one they stay in the cache.
    alone = (drawn_axes(line, seed, range(fibre, fibre + 1)) for fibre in range(count))
    return np.concatenate([linear_response(made, unit, axes) for axes in alone])


def linear_correlations(experiment: Experiment, grid: Grid) -> LinearCorrelations:
    """What the receiver would see of this experiment with the Kerr term off."""
    noise_figures = experiment.booster.noise_figure_db, experiment.preamplifier.noise_figure_db
    if noise_figures == (None, None) and not is_noisy(experiment.receiver):
        # The power scales the light and nothing else: all points of a sweep are one.
        launch = experiment.launch.model_copy(update={"total_power_mw": 1.0})
        experiment = experiment.model_copy(update={"launch": launch})
    if grid.samples > KEPT_SAMPLES:
        return _linear_correlations(experiment, grid)
    return _kept_correlations(experiment, grid)


def _linear_correlations(experiment: Experiment, grid: Grid) -> LinearCorrelations:
    return _correlations(arriving_response(experiment, grid), experiment, grid)


_kept_correlations = lru_cache(maxsize=16)(_linear_correlations)


def launched_central(experiment: Experiment, grid: Grid) -> float:
    """C12(0) that the receiver would see of the launch itself."""
    return float(_correlations(input_response(experiment, grid)[None], experiment, grid).cross[0])


def _correlations(response: Complex, experiment: Experiment, grid: Grid) -> LinearCorrelations:
    """Correlations after preamplifier and receiver of light of a response for each fibre."""
    receiver = experiment.receiver
    coherence = mutual_coherence(received_response(experiment, response, grid))
    demultiplex = demultiplexing(receiver)
    means = coherence[:, [0, 1], [0, 1], 0].real @ demultiplex.T
    mean = np.maximum(means.mean(axis=0), np.finfo(float).tiny)
    power = np.mean(np.abs(coherence) ** 2, axis=0)
    covariance = np.einsum("ja,kb,abt->jkt", demultiplex, demultiplex, power)
    covariance += (np.cov(means.T, bias=True) if len(means) > 1 else np.zeros((2, 2)))[..., None]
    transfer = power_transfer(receiver, np.abs(grid.frequency_thz) * 1e3)
    seen = np.fft.ifft(np.fft.fft(covariance) * transfer).real
    if is_noisy(receiver) and receiver.noise_correction == "off":
        noise = noise_of(receiver, mean_powers_w(experiment, grid), grid)
        seen[[0, 1], [0, 1]] += noise_variance(receiver, noise, mean, grid)
    # A component launched without power has no fluctuation to correlate.
    variance = np.maximum(seen[[0, 1], [0, 1], 0], np.finfo(float).tiny)
    total = seen.sum(axis=(0, 1))
    return LinearCorrelations(
        auto1=seen[0, 0] / variance[0],
        auto2=seen[1, 1] / variance[1],
        sum=total / total[0],
        cross=seen[0, 1] / np.sqrt(variance[0] * variance[1]),
        moment_cross=float(1.0 + seen[0, 1, 0] / (mean[0] * mean[1])),
    )
