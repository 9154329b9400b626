"""The script a lab would write by hand: the yardstick of ``crossdip bench``.

Symmetric split steps of one length, numpy, double precision, one process. It knows nothing of
the solver. Fields in √W, shape (2, samples); time in ps, distance in km.
"""

from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[Any]


class Fibre(NamedTuple):
    """One uniform fibre; self and cross are the Kerr factors of the coupling."""

    length_km: float
    beta2_ps2_per_km: float
    loss_db_per_km: float
    gamma_per_w_km: float
    self_factor: float
    cross_factor: float


def propagate(field: Array, time_step_ps: float, fibre: Fibre, steps: int) -> Array:
    """The field at the end of the fibre after equal steps: half linear, Kerr, half linear."""
    h = fibre.length_km / steps
    omega = 2 * np.pi * np.fft.fftfreq(field.shape[1], time_step_ps)
    alpha = fibre.loss_db_per_km * np.log(10) / 10
    half = np.exp((-alpha / 2 + 0.5j * fibre.beta2_ps2_per_km * omega**2) * h / 2)
    whole = half**2
    own = fibre.gamma_per_w_km * fibre.self_factor * h
    other = fibre.gamma_per_w_km * fibre.cross_factor * h
    # Two halves that meet are one linear step, so a step costs two transforms and not four.
    a = np.fft.ifft(half * np.fft.fft(field.astype(np.complex128)))
    for step in range(steps):
        power = np.abs(a) ** 2
        a = a * np.exp(1j * (own * power + other * power[::-1]))
        a = np.fft.ifft((whole if step + 1 < steps else half) * np.fft.fft(a))
    return a


def distance(field: Array, reference: Array) -> float:
    """Relative L2 distance."""
    return float(np.linalg.norm(field - reference) / np.linalg.norm(reference))


def steps_for(
    field: Array, time_step_ps: float, fibre: Fibre, tolerance: float, first: int = 1
) -> tuple[int, float]:
    """Number of the largest equal steps that keep the field within the tolerance, and its error.

    Steps are halved until a run and the next finer one agree; then the number is bracketed from
    below, to one part in sixteen. A run of second order with m steps keeps (m/n)² of the error
    of one with n fewer steps, which the error against that finer run is mended by.
    """

    def run(steps: int) -> Array:
        return propagate(field, time_step_ps, fibre, steps)

    def error_of(steps: int, found: Array) -> float:
        return distance(found, finest) / (1 - (steps / (2 * enough)) ** 2)

    enough, found = first, run(first)
    while True:
        finest = run(2 * enough)
        error = error_of(enough, found)
        if error <= tolerance:
            break
        enough, found = 2 * enough, finest
    low, high = enough // 2, enough
    while high - low > max(1, high // 16):
        middle = (low + high) // 2
        tried = error_of(middle, run(middle))
        if tried <= tolerance:
            high, error = middle, tried
        else:
            low = middle
    return high, error


def moments(field: Array) -> Array:
    """Time means of I1, I2, I1², I2², I1·I2."""
    i1, i2 = np.abs(field) ** 2
    return np.array([x.mean() for x in (i1, i2, i1 * i1, i2 * i2, i1 * i2)])


def central_correlation(of_realizations: list[Array]) -> float:
    """C12(0): covariance of the two intensities over the root of the product of variances."""
    m1, m2, m11, m22, m12 = np.mean(of_realizations, axis=0)
    return float((m12 - m1 * m2) / np.sqrt((m11 - m1**2) * (m22 - m2**2)))
