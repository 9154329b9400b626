"""Every compiled loop, each made once per precision from one source.

Each kernel has a plain numpy twin in tests/reference.py. Full ``fastmath`` is used nowhere:
the Kerr and linear kernels allow contraction into fused multiply-adds only, since NaN must
survive to be seen; sums may be reassociated as well, which is still the same to the bit on one
machine. Kernels are compiled for the processor at hand and cached beside the package.
"""

import math
from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
from numba import njit

from solver.grid import Field, Real

Kernel = Callable[..., Any]
Floating = type[np.float32] | type[np.float64]


@cache
def kerr_rotation(dtype: Floating) -> Kernel:
    """Kernel ``rotate(field, self_phase, cross_phase)``: the exact Kerr flow, in place.

    field: complex, shape (realizations, 2, samples), √W.
    Each component turns by self_phase·|own|² + cross_phase·|other|² rad (phases in rad/W).

    The turn is reduced to (−π, π], the sine and cosine of its quarter are taken from Taylor
    polynomials good to half a unit in the last place on [−π/4, π/4], and the angle is doubled
    twice: no branch and no table stands in the way of vector instructions.
    """
    s1, s2, s3, s4, s5, s6, s7 = (dtype((-1) ** n / math.factorial(2 * n + 1)) for n in range(1, 8))
    c1, c2, c3, c4, c5, c6, c7, c8 = (dtype((-1) ** n / math.factorial(2 * n)) for n in range(1, 9))
    short = dtype is np.float32
    # Adding and taking away 1.5·2^(mantissa bits) rounds to a whole number of turns.
    rounder = dtype(1.5 * 2.0 ** np.finfo(dtype).nmant)
    turns_per_rad = dtype(1.0 / (2.0 * math.pi))
    # 2π in two parts; the first has few enough bits for exact products with whole numbers.
    coarse = dtype(6.28125)
    fine = dtype(2.0 * math.pi - 6.28125)
    one, two, quarter = dtype(1.0), dtype(2.0), dtype(0.25)

    @njit(inline="always", fastmath={"contract"})
    def turn(angle: Any) -> Any:
        whole = (angle * turns_per_rad + rounder) - rounder
        t = ((angle - whole * coarse) - whole * fine) * quarter
        x = t * t
        if short:
            sine = t + t * x * (s1 + x * (s2 + x * (s3 + x * s4)))
            cosine = one + x * (c1 + x * (c2 + x * (c3 + x * (c4 + x * c5))))
        else:
            sine = t + t * x * (s1 + x * (s2 + x * (s3 + x * (s4 + x * (s5 + x * (s6 + x * s7))))))
            cosine = one + x * (
                c1 + x * (c2 + x * (c3 + x * (c4 + x * (c5 + x * (c6 + x * (c7 + x * c8))))))
            )
        sine, cosine = two * sine * cosine, one - two * sine * sine
        return two * sine * cosine, one - two * sine * sine

    @njit(cache=True, fastmath={"contract"}, error_model="numpy")
    def rotate(field: Field, self_phase: Any, cross_phase: Any) -> None:
        realizations, _, samples = field.shape
        for r in range(realizations):
            u = field[r, 0]
            v = field[r, 1]
            for i in range(samples):
                ur, ui, vr, vi = u[i].real, u[i].imag, v[i].real, v[i].imag
                p = ur * ur + ui * ui
                q = vr * vr + vi * vi
                sine, cosine = turn(self_phase * p + cross_phase * q)
                u[i] = complex(ur * cosine - ui * sine, ur * sine + ui * cosine)
                sine, cosine = turn(self_phase * q + cross_phase * p)
                v[i] = complex(vr * cosine - vi * sine, vr * sine + vi * cosine)

    return rotate


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def linear_flow(spectrum: Field, operator: Field) -> None:
    """Multiply every realization by one operator, in place.

    spectrum: complex, shape (realizations, 2, samples); operator: the same type, (2, samples).
    """
    realizations, components, samples = spectrum.shape
    for r in range(realizations):
        for j in range(components):
            line = spectrum[r, j]
            factor = operator[j]
            for i in range(samples):
                a, b = line[i], factor[i]
                line[i] = complex(
                    a.real * b.real - a.imag * b.imag, a.real * b.imag + a.imag * b.real
                )


@njit(cache=True, fastmath={"contract", "reassoc"}, error_model="numpy")
def band_energy(spectrum: Field, first: int, last: int) -> Real:
    """Energy of each realization in bins first to last − 1, both components; float64.

    spectrum: complex, shape (realizations, 2, samples), FFT order.
    """
    realizations, components, _ = spectrum.shape
    energy = np.empty(realizations)
    for r in range(realizations):
        total = 0.0
        for j in range(components):
            line = spectrum[r, j, first:last]
            partial = line[0].real * 0.0
            for i in range(line.size):
                partial += line[i].real * line[i].real + line[i].imag * line[i].imag
            total += partial
        energy[r] = total
    return energy


@njit(cache=True, fastmath={"contract", "reassoc"}, error_model="numpy")
def column_powers(field: Field, columns: int) -> Real:
    """Mean power of both components in equal parts of the window; float64, shape (2, columns).

    field: complex, shape (2, samples), √W; columns divides samples.
    """
    samples = field.shape[1]
    width = samples // columns
    powers = np.empty((2, columns))
    for j in range(2):
        line = field[j]
        for column in range(columns):
            total = 0.0
            for i in range(column * width, (column + 1) * width):
                real, imag = np.float64(line[i].real), np.float64(line[i].imag)
                total += real * real + imag * imag
            powers[j, column] = total / width
    return powers


@njit(cache=True, fastmath={"contract", "reassoc"}, error_model="numpy")
def intensity_moments(field: Field) -> Real:
    """Time means of I1, I2, I1², I2², I1·I2 of each realization; float64, shape (realizations, 5).

    field: complex, shape (realizations, 2, samples), √W.
    """
    realizations, _, samples = field.shape
    moments = np.empty((realizations, 5))
    for r in range(realizations):
        u = field[r, 0]
        v = field[r, 1]
        p1 = p2 = p11 = p22 = p12 = 0.0
        for i in range(samples):
            ur, ui = np.float64(u[i].real), np.float64(u[i].imag)
            vr, vi = np.float64(v[i].real), np.float64(v[i].imag)
            p = ur * ur + ui * ui
            q = vr * vr + vi * vi
            p1 += p
            p2 += q
            p11 += p * p
            p22 += q * q
            p12 += p * q
        moments[r, 0], moments[r, 1] = p1 / samples, p2 / samples
        moments[r, 2], moments[r, 3], moments[r, 4] = p11 / samples, p22 / samples, p12 / samples
    return moments
