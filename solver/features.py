"""What is kept of each realization: the vectors that the accumulators add up."""

from dataclasses import dataclass

import numpy as np
from scipy import fft

from solver.grid import Field, Grid, Real
from solver.kernels import (
    domain_counts,
    intensity_counts,
    local_polarization,
    quadrature_counts,
    spectral_lines,
    sphere_counts,
)
from solver.layout import (
    CONTRAST_BINS,
    DURATION_BINS,
    INTENSITY_BINS,
    LARGEST_INTENSITY,
    LARGEST_QUADRATURE,
    QUADRATURE_BINS,
    SPHERE_BINS,
    Layout,
)


@dataclass(frozen=True)
class Observed:
    """Realizations at both ends of the line and behind the receiver.

    launched, arrived, received: fields at the launch, at the end of the line and at the
    demultiplexer, √W, (realizations, 2, samples), each on any time step of the layout's window;
    detected: intensities after the receiver, W, on the digitizer's time step or a finer one.
    received_w, detected_w: their expected means, W, shape (2,). known_noise_w2: autocovariance
    of the receiver's noise to be taken off, (2, digitizer samples), FFT order. moments:
    (realizations, distances, 5) after the receiver, that noise taken off; walls: number of sign
    changes of the contrast there, (realizations, distances).
    """

    launched: Field
    arrived: Field
    received: Field
    detected: Real
    received_w: Real
    detected_w: Real
    known_noise_w2: Real
    moments: Real
    walls: Real


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
    positive, signed = _lags(samples, layout)

    def correlate(density: Field | Real, lags: np.ndarray) -> Real:
        return np.asarray(fft.irfft(density, n=samples)[:, lags] / samples)

    return np.concatenate(
        [
            correlate(first.real**2 + first.imag**2, positive),
            correlate(second.real**2 + second.imag**2, positive),
            correlate(first.conj() * second, signed),
        ],
        axis=1,
    )


def _lags(samples: int, layout: Layout) -> tuple[np.ndarray, np.ndarray]:
    """Lags ≥ 0 and signed lags of the layout, in samples of a time step of its window."""
    stride = layout.lag_stride * (samples // layout.detected.samples)
    return np.arange(layout.lags + 1) * stride, np.arange(-layout.lags, layout.lags + 1) * stride


def contrast_correlation(contrast: Real, layout: Layout) -> Real:
    """Time means of C(t) and of C(t) C(t+τ) at the layout's lags ≥ 0; (realizations, 2 + lags)."""
    samples = contrast.shape[1]
    spectrum = fft.rfft(contrast)
    mean = spectrum[:, :1].real / samples
    products = fft.irfft(spectrum.real**2 + spectrum.imag**2, n=samples) / samples
    return np.concatenate([mean, products[:, _lags(samples, layout)[0]]], axis=1)


def domain_features(intensity: Real, grid: Grid, layout: Layout) -> tuple[Real, Real, Real]:
    """Walls with the sum of their widths in ps, and durations; contrast densities; contrast.

    Shapes (realizations, 2 + DURATION_BINS), (realizations, CONTRAST_BINS) and (realizations,
    samples). A wall is a sign change of the contrast of running means over the layout's
    smoothing, its width 2/|dC/dt| there.
    """
    width = max(1, round(layout.wall_smoothing_ps / grid.time_step_ps))
    counts = np.zeros((len(intensity), CONTRAST_BINS))
    walls = np.zeros((len(intensity), 2 + DURATION_BINS))
    contrast = np.empty((len(intensity), grid.samples), dtype=intensity.dtype)
    longest = layout.longest_duration_ps / grid.time_step_ps
    domain_counts(intensity, width, longest, contrast, counts, walls)
    walls[:, 1] *= grid.time_step_ps
    return walls, counts * (CONTRAST_BINS / 2 / grid.samples), contrast


def power_densities(field: Field, layout: Layout) -> tuple[Real, Real]:
    """Spectra of both components on the layout's bins, W/GHz, and sums over their lines.

    field: √W, shape (realizations, 2, samples) on any time step of the layout's window; what
    lies beyond the axis, on a finer one, is left out of the spectra but not of the sums. Shapes
    (realizations, 2·bins) and (realizations, 2·4): Σp, Σfp, Σf²p and Σp_k p_{k+1} in W and GHz.
    The spectra are those that the layout's analyser shows.
    """
    window_ns = layout.grid.window_ps / 1e3
    density = np.zeros((*field.shape[:2], layout.frequency_bins))
    sums = np.empty((*field.shape[:2], 4))
    spectral_lines(fft.fft(field, norm="forward"), layout.grid.samples, density, sums)
    density *= window_ns
    sums[..., 1] /= window_ns
    sums[..., 2] /= window_ns**2
    if layout.analyser_ghz is not None:
        # A Gaussian over frequency is a Gaussian window over the lags of the spectrum.
        spacing_ghz = layout.grid.samples / layout.frequency_bins / window_ns
        padded = 2 * layout.frequency_bins  # so that the ends of the axis do not meet
        lag = np.fft.rfftfreq(padded, spacing_ghz)
        window = np.exp(-((np.pi * layout.analyser_ghz * lag) ** 2) / (4.0 * np.log(2.0)))
        shown = fft.irfft(fft.rfft(density, n=padded) * window, n=padded)
        density = shown[..., : layout.frequency_bins]
    return density.reshape(len(field), -1), sums.reshape(len(field), -1)


def _distributions(seen: Observed) -> tuple[Real, Real]:
    """Densities of intensities over their means, and of field quadratures over their deviation."""
    rows = len(seen.received)
    intensities = np.zeros((rows, 3, INTENSITY_BINS))
    intensity_counts(seen.detected, seen.detected_w, LARGEST_INTENSITY, intensities)
    intensities *= INTENSITY_BINS / LARGEST_INTENSITY / seen.detected.shape[2]
    quadratures = np.zeros((rows, QUADRATURE_BINS))
    deviation = np.sqrt(seen.received_w / 2.0)
    quadrature_counts(seen.received, deviation, LARGEST_QUADRATURE, quadratures)
    lit = 2.0 * max(1, int(np.count_nonzero(deviation))) * seen.received.shape[2]
    quadratures *= QUADRATURE_BINS / (2.0 * LARGEST_QUADRATURE) / lit
    return intensities.reshape(rows, -1), quadratures


def _on_the_sphere(field: Field) -> tuple[Real, Real]:
    """Density over the Poincaré sphere, 1/sr, each moment weighing alike; means of S0 to S3, W."""
    rows, cells = len(field), SPHERE_BINS[0] * SPHERE_BINS[1]
    counts = np.zeros((rows, *SPHERE_BINS))
    real = np.float32 if field.dtype == np.complex64 else np.float64
    means = sphere_counts(real)(field, counts)
    counts *= cells / (4.0 * np.pi) / field.shape[2]
    return counts.reshape(rows, -1), means


def _stokes_means(field: Field) -> Real:
    first, second = field[:, 0], field[:, 1]
    powers = [np.mean(x.real**2 + x.imag**2, axis=1) for x in (first, second)]
    product = 2.0 * np.mean(first.conj() * second, axis=1)
    return np.stack(
        [powers[0] + powers[1], powers[0] - powers[1], product.real, product.imag], axis=1
    )


def features(layout: Layout, seen: Observed) -> tuple[Real, Real]:
    """Feature vectors of realizations for :class:`Blocks` and :class:`Means`, as a layout says."""
    rows, samples = len(seen.arrived), seen.detected.shape[2]
    grid = Grid(samples, layout.grid.window_ps / samples)
    walls, contrast_density, contrast = domain_features(seen.detected, grid, layout)
    correlations = raw_correlations(seen.detected, layout)
    lags = np.arange(layout.lags + 1) * layout.lag_stride
    correlations[:, : 2 * len(lags)] -= seen.known_noise_w2[:, lags].ravel()
    sphere, received_stokes = _on_the_sphere(seen.received)
    launched_stokes = _stokes_means(seen.launched)
    step_ps = layout.grid.window_ps / seen.received.shape[2]
    width = max(1, round(layout.wall_smoothing_ps / step_ps))
    spectra, lines = zip(
        *(power_densities(field, layout) for field in (seen.launched, seen.arrived)), strict=True
    )
    blocks = np.concatenate(
        [
            seen.moments.reshape(rows, -1),
            correlations,
            walls,
            seen.walls,
            contrast_correlation(contrast, layout),
            launched_stokes,
            received_stokes,
            local_polarization(seen.received, width)[:, None],
            *lines,
        ],
        axis=1,
    )
    powers = [sums.reshape(rows, 2, 4)[..., 0] for sums in lines]
    linear = np.concatenate(
        [*powers, contrast_density, *spectra, sphere, *_distributions(seen)], axis=1
    )
    return blocks, linear
