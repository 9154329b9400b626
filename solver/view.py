"""Estimates as JSON carries them."""

from collections.abc import Mapping
from typing import Any

import numpy as np

from solver.grid import Real
from solver.layout import (
    INTENSITY_BINS,
    LARGEST_INTENSITY,
    LARGEST_QUADRATURE,
    QUADRATURE_BINS,
)
from solver.statistics import ALONG, CORRELATIONS, INTENSITIES, SPECTRA, Estimate
from solver.thermal import intensity_density, quadrature_density, sum_density

Numbers = list[float | None]
FIGURES: dict[str, tuple[str, int]] = {
    "walls_per_ns": ("walls_per_ns", 0),
    "mean_duration_ps": ("mean_duration_ps", 0),
    "wall_width_ps": ("wall_width_ps", 0),
    "moment_cross": ("moment_cross", 0),
    "second_moment1": ("second_moment1", -1),
    "second_moment2": ("second_moment2", -1),
    "polarization_degree": ("polarization_degree", 1),
    "rms1_ghz": ("spectral_rms_ghz", 2),
    "rms2_ghz": ("spectral_rms_ghz", 3),
    "coherence_time1_ps": ("coherence_time_ps", 2),
    "coherence_time2_ps": ("coherence_time_ps", 3),
}
"""Single numbers at the end of the line, to be drawn against a sweep: estimate and index."""


def numbers(values: Real) -> Numbers:
    """Floats that JSON can carry, to 7 significant digits; None where not finite."""
    finite = np.isfinite(values)
    plain = np.where(finite, values, 0.0)
    size = np.abs(plain)
    # Dividing by a power of ten, or multiplying, whichever is a whole number: both print short.
    digits = 6 - np.floor(np.log10(np.where(size > 0.0, size, 1.0)))
    up, down = 10.0 ** np.maximum(digits, 0.0), 10.0 ** np.maximum(-digits, 0.0)
    short = np.rint(plain * up / down) * down / up
    return [x if ok else None for x, ok in zip(short.tolist(), finite.tolist(), strict=True)]


def number(value: float) -> float | None:
    """A float that JSON can carry."""
    return numbers(np.array([value]))[0]


def named(values: Mapping[str, Any]) -> dict[str, Any]:
    """Floats among the values that JSON can carry; anything else as it is."""
    return {k: number(v) if isinstance(v, float) else v for k, v in values.items()}


def pair(estimate: Estimate) -> dict[str, Numbers]:
    """A curve and its standard errors."""
    return {
        "value": numbers(estimate.value),
        "standard_error": numbers(estimate.standard_error),
    }


def density(estimate: Estimate) -> dict[str, Any]:
    """A histogram and its standard errors, as nested lists where it has two axes."""
    value, error = estimate
    if value.ndim == 2:
        return {
            "density": [numbers(row) for row in value],
            "standard_error": [numbers(row) for row in error],
        }
    return {"density": numbers(value), "standard_error": numbers(error)}


def single(estimate: Estimate, index: int = 0) -> dict[str, float | None]:
    """One number and its standard error."""
    return {
        "value": number(estimate.value[index]),
        "standard_error": number(estimate.standard_error[index]),
    }


def figures_view(found: Mapping[str, Estimate]) -> dict[str, Any]:
    """The single numbers at the end of the line that are there; JSON-able."""
    return {
        name: single(found[estimate], index)
        for name, (estimate, index) in FIGURES.items()
        if estimate in found
    }


def estimates_view(found: Mapping[str, Estimate]) -> dict[str, Any]:
    """Every estimate of a point; JSON-able."""
    powers = numbers(found["powers"].value)
    names = ("launched_1_w", "launched_2_w", "received_1_w", "received_2_w")
    shown = {
        "distance": pair(found["distance"]),
        "correlations": {name: pair(found[name]) for name in CORRELATIONS},
        "moment_cross": single(found["moment_cross"]),
        "spectra": {name: pair(found[name]) for name in SPECTRA},
        "contrast": density(found["contrast"]),
        "durations": density(found["durations"]),
        "walls_per_ns": single(found["walls_per_ns"]),
        "mean_duration_ps": single(found["mean_duration_ps"]),
        "energy": dict(zip(names, powers, strict=True)),
    }
    if "stokes" in found:  # files of the first format have no more
        shown |= _polarization(found) | _distributions(found) | _widths(found)
        shown["evolution"] = {
            name: pair(found[name]) for name in (*ALONG, "walls_along", "duration_along")
        }
        shown["wall_width_ps"] = single(found["wall_width_ps"])
        shown["contrast_correlation"] = pair(found["contrast_correlation"])
    return shown


def _polarization(found: Mapping[str, Estimate]) -> dict[str, Any]:
    value, error = found["stokes_means"]
    degree = found["polarization_degree"]
    ends: dict[str, Any] = {}
    for index, end in enumerate(("launched", "received")):
        means = Estimate(value[index], error[index])
        ends[end] = {f"s{axis + 1}": single(means, axis) for axis in range(3)}
        ends[end]["degree"] = single(degree, index)
    local = single(found["local_polarization_degree"])
    return {
        "stokes": density(found["stokes"]),
        "polarization": {**ends, "local_degree": local},
    }


def _distributions(found: Mapping[str, Estimate]) -> dict[str, Any]:
    """Histograms, each with the density of thermal light whose components are independent."""
    first, second = found["powers"].value[2:]
    share = float(first / (first + second)) if first + second > 0.0 else 0.5
    edges = np.linspace(0.0, LARGEST_INTENSITY, INTENSITY_BINS + 1)
    single_mode = numbers(intensity_density(edges))
    references = [single_mode, single_mode, numbers(sum_density(edges, share))]
    edges = np.linspace(-LARGEST_QUADRATURE, LARGEST_QUADRATURE, QUADRATURE_BINS + 1)
    return {
        "intensities": {
            name: {**density(found[name]), "reference": reference}
            for name, reference in zip(INTENSITIES, references, strict=True)
        },
        "quadratures": {
            **density(found["quadratures"]),
            "reference": numbers(quadrature_density(edges)),
        },
    }


def _widths(found: Mapping[str, Estimate]) -> dict[str, Any]:
    names = ("spectral_rms_ghz", "spectral_fwhm_ghz", "coherence_time_ps")
    return {
        "widths": {
            spectrum: {name.removeprefix("spectral_"): single(found[name], index) for name in names}
            for index, spectrum in enumerate(SPECTRA)
        }
    }
