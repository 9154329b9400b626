"""Full width at half maximum of a spectrum known with errors."""

import numpy as np

from solver.accumulators import Estimate

FEWEST_BINS = 4
"""A spectrum narrower than this many bins of its axis has no width to be read off."""
SMOOTHING = 0.15
"""Width of the smoothing before the maximum is looked for, in units of 1/τc: it keeps the
highest of many uncertain bins from passing for the maximum. A Gaussian spectrum is 0.66/τc wide."""


def half_maximum_width(
    density: Estimate, spacing: float, coherence_bandwidth: float, resolution: float = 0.0
) -> Estimate:
    """Distance of the outermost crossings of half the maximum, and its standard error.

    density: on an even axis, errors of bins independent of each other but for a Gaussian of full
    width ``resolution`` that smoothed it. spacing: of the axis; coherence_bandwidth: 1/τc in the
    same unit, which sets another Gaussian smoothing, whose width is taken off again in
    quadrature. nan where the spectrum is too narrow for the axis.
    """
    unknown = Estimate(np.array([np.nan]), np.array([np.nan]))
    if not coherence_bandwidth >= FEWEST_BINS * spacing:
        return unknown
    width = SMOOTHING * coherence_bandwidth
    reach = int(2.0 * width / spacing)
    kernel = np.exp(-4.0 * np.log(2.0) * (np.arange(-reach, reach + 1) * spacing / width) ** 2)
    kernel /= kernel.sum()
    smooth = np.convolve(density.value, kernel, "same")
    variance = np.convolve(density.standard_error**2, kernel**2, "same")
    # Σk² of a Gaussian of full width W is single/W: what neighbours share is not averaged away.
    single = np.sqrt(2.0 * np.log(2.0) / np.pi) * spacing
    before, own = max(resolution, single), max(width, single)
    variance *= before * own / (single * np.sqrt(before**2 + own**2 - single**2))
    peak = int(np.argmax(smooth))
    half = 0.5 * smooth[peak]
    above = np.flatnonzero(smooth >= half)
    first, last = int(above[0]), int(above[-1])
    if half <= 0.0 or first == 0 or last + 1 == len(smooth):
        return unknown
    rise, fall = smooth[first] - smooth[first - 1], smooth[last] - smooth[last + 1]
    found = (last + (smooth[last] - half) / fall) - (first - (smooth[first] - half) / rise)
    found *= spacing
    spread = variance[first] / rise**2 + variance[last] / fall**2
    spread += 0.25 * variance[peak] * (1.0 / rise + 1.0 / fall) ** 2
    true = np.sqrt(max(found**2 - (width if reach else 0.0) ** 2, spacing**2))
    error = np.sqrt(spread) * spacing * found / true
    return Estimate(np.array([true]), np.array([error]))
