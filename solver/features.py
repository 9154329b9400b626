"""What is kept of each realization: the vectors that the accumulators add up."""

import numpy as np
from scipy import fft

from solver.grid import Field, Grid, Real
from solver.kernels import domain_counts
from solver.statistics import CONTRAST_BINS, DURATION_BINS, Layout


def moments(intensity: Real) -> Real:
    """Time means of I1, I2, I1², I2², I1·I2; shape (realizations, 5)."""
    first, second = intensity[:, 0], intensity[:, 1]
    products = [first, second, first**2, second**2, first * second]
    return np.stack([product.mean(axis=1) for product in products], axis=1)


def raw_correlations(intensity: Real, layout: Layout) -> Real:
    """Time means ⟨I_j(t) I_k(t+τ)⟩ at the layout's lags.

    intensity: W, shape (realizations, 2, samples) on any time step of the layout's window.
    Shape (realizations, 4·lags + 3): auto 1 and auto 2 at lags ≥ 0, cross at signed lags.
    """
    samples = intensity.shape[2]
    spectrum = fft.rfft(intensity)
    first, second = spectrum[:, 0], spectrum[:, 1]
    stride = layout.lag_stride * (samples // layout.grid.samples)
    positive = np.arange(layout.lags + 1) * stride
    signed = np.arange(-layout.lags, layout.lags + 1) * stride

    def correlate(density: Field, lags: np.ndarray) -> Real:
        return np.asarray(fft.irfft(density, n=samples)[:, lags] / samples)

    return np.concatenate(
        [
            correlate(np.abs(first) ** 2, positive),
            correlate(np.abs(second) ** 2, positive),
            correlate(first.conj() * second, signed),
        ],
        axis=1,
    )


def domain_features(intensity: Real, grid: Grid, layout: Layout) -> tuple[Real, Real]:
    """Walls and durations, shape (realizations, 1 + DURATION_BINS); contrast densities.

    A wall is a sign change of the contrast of running means over the layout's smoothing.
    """
    width = max(1, round(layout.wall_smoothing_ps / grid.time_step_ps))
    counts = np.zeros((len(intensity), CONTRAST_BINS))
    walls = np.zeros((len(intensity), 1 + DURATION_BINS))
    longest = layout.longest_duration_ps / grid.time_step_ps
    domain_counts(intensity, width, longest, counts, walls)
    return walls, counts * (CONTRAST_BINS / 2 / grid.samples)


def power_densities(field: Field, layout: Layout) -> Real:
    """Spectra of both components on the layout's bins, W/GHz; (realizations, 2·bins).

    field: √W, shape (realizations, 2, samples) on any time step of the layout's window; what
    lies beyond the axis, on a finer one, is left out.
    """
    samples, kept = field.shape[2], layout.grid.samples
    spectrum = fft.fft(field, norm="forward")
    density = np.zeros((*field.shape[:2], kept))
    half = min(samples, kept) // 2
    for part in (slice(0, half), slice(-half, None)):
        density[..., part] = np.abs(spectrum[..., part]) ** 2
    density = layout.grid.by_offset(density) * (layout.grid.window_ps / 1e3)
    binned = density.reshape(*density.shape[:2], layout.frequency_bins, -1).mean(axis=3)
    return np.asarray(binned.reshape(len(field), -1))


def features(
    layout: Layout,
    launched: Field,
    arrived: Field,
    detected: Real,
    distance_moments: Real,
) -> tuple[Real, Real]:
    """Feature vectors of realizations for :class:`Blocks` and :class:`Means`.

    launched, arrived: fields at both ends of the line, √W, (realizations, 2, samples), each on
    any time step of the layout's window; detected: intensities after the receiver, W, on the
    layout's time step or a finer one; distance_moments: (realizations, distances, 5) after the
    receiver.
    """
    grid = Grid(detected.shape[2], layout.grid.window_ps / detected.shape[2])
    walls, contrast = domain_features(detected, grid, layout)
    rows = len(arrived)
    blocks = np.concatenate(
        [distance_moments.reshape(rows, -1), raw_correlations(detected, layout), walls], axis=1
    )
    powers = [np.mean(f.real**2 + f.imag**2, axis=2) for f in (launched, arrived)]
    linear = np.concatenate(
        [
            *powers,
            contrast,
            power_densities(launched, layout),
            power_densities(arrived, layout),
        ],
        axis=1,
    )
    return blocks, linear
