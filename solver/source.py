"""Power spectra of thermal-like light, and its random draws."""

import numpy as np
from scipy import fft

from solver.experiment import Source
from solver.grid import Complex, Field, Grid, Real


def power_spectrum(source: Source, grid: Grid) -> Real:
    """Fraction of the source's power in each frequency bin, FFT order, summing to 1."""
    if source.measured is not None:
        measured = source.measured
        # An optical frequency above the carrier is a negative baseband frequency.
        heights = np.array(measured.density) / max(measured.density)
        density = np.interp(
            -1e3 * grid.frequency_thz, measured.offset_ghz, heights, left=0.0, right=0.0
        )
        return np.asarray(density / density.sum())
    x = 2e3 * grid.frequency_thz / source.width_ghz  # ±1 at half maximum
    match source.shape:
        case "gaussian":
            density = np.exp(-np.log(2.0) * x**2)
        case "super_gaussian":
            density = np.exp(-np.log(2.0) * np.minimum(np.abs(x), 1e3) ** (2 * source.order))
        case "rectangular":
            density = (np.abs(x) <= 1.0).astype(np.float64)
        case "sech2":
            density = 1.0 / np.cosh(np.minimum(np.arccosh(np.sqrt(2.0)) * np.abs(x), 300.0)) ** 2
    return np.asarray(density / density.sum())


SOURCE, BOOSTER, PREAMPLIFIER, DIODES = range(4)
"""What draws noise: the streams of one realization are independent of each other."""


def stream(seed: int, realization: int, what: int) -> np.random.Generator:
    """The random numbers of one realization that are drawn for one purpose."""
    key = (realization,) if what == SOURCE else (realization, what)
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=key))


def draw(seed: int, realizations: range, grid: Grid, what: int = SOURCE) -> Complex:
    """White circular complex Gaussian noise of unit variance per frequency bin.

    Shape (realizations, 2 draws, samples), FFT order. Realization ``i`` of a seed is always
    child ``i`` of its SeedSequence, and bins are drawn outwards from the carrier, so that the
    light is the same whatever the batch and however fine the time step of the same window.
    """
    samples = grid.samples
    outwards = np.argsort(np.abs(np.fft.fftfreq(samples)), kind="stable")
    place = np.argsort(outwards)
    noise = np.empty((len(realizations), 2, samples), dtype=np.complex128)
    for row, index in zip(noise, realizations, strict=True):
        values = stream(seed, index, what).standard_normal((samples, 4)).view(np.complex128)
        np.take(values.T, place, axis=1, out=row)
    noise *= np.sqrt(0.5)
    return noise


def synthesize(noise: Field, response: Field) -> Field:
    """Fields in √W from white noise and the response of the whole input, in their precision.

    noise has shape (realizations, draws, samples), response (2 components, draws, samples)
    in √W; the result has shape (realizations, 2 components, samples).
    """
    spectrum = np.einsum("jdf,rdf->rjf", response, noise)
    return np.asarray(fft.ifft(spectrum, norm="forward"))
