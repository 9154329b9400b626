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

import llvmlite.binding as llvm
import numpy as np
from numba import njit
from numba.core import config

from solver.grid import Field, Real

Kernel = Callable[..., Any]
Floating = type[np.float32] | type[np.float64]

_settings = vars(config)
if _settings["CPU_NAME"] is None:
    # LLVM keeps to 256-bit vectors on processors that have longer ones, for the sake of programs
    # with little to do in them. These loops take half the time on the longer ones.
    _settings["CPU_NAME"] = llvm.get_host_cpu_name()
    _settings["CPU_FEATURES"] = f"{llvm.get_host_cpu_features().flatten()},-prefer-256-bit"


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
            if self_phase == cross_phase:  # Manakov: both components turn alike
                for i in range(samples):
                    ur, ui, vr, vi = u[i].real, u[i].imag, v[i].real, v[i].imag
                    p = ur * ur + ui * ui
                    q = vr * vr + vi * vi
                    sine, cosine = turn(self_phase * (p + q))
                    u[i] = complex(ur * cosine - ui * sine, ur * sine + ui * cosine)
                    v[i] = complex(vr * cosine - vi * sine, vr * sine + vi * cosine)
                continue
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
def band_share(spectrum: Field, first: int, last: int) -> float:
    """Largest share of a realization's energy in bins first to last − 1; nan if any is not finite.

    spectrum: complex, shape (realizations, 2, samples), FFT order.
    """
    realizations, components, samples = spectrum.shape
    largest = 0.0
    for r in range(realizations):
        inside = outside = 0.0
        for j in range(components):
            for start, stop, within in (
                (0, first, False),
                (first, last, True),
                (last, samples, False),
            ):
                line = spectrum[r, j, start:stop]
                partial = spectrum[r, j, 0].real * 0.0
                for i in range(line.size):
                    partial += line[i].real * line[i].real + line[i].imag * line[i].imag
                if within:
                    inside += partial
                else:
                    outside += partial
        if not math.isfinite(inside + outside):
            return math.nan
        if inside > 0.0:
            largest = max(largest, inside / (inside + outside))
    return largest


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


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def domain_counts(
    intensity: Real, width: int, longest: float, contrast_counts: Real, walls: Real
) -> None:
    """Contrast and walls of running means, counted into arrays given as zeros.

    intensity: W, shape (realizations, 2, samples), periodic. width: samples in the running mean,
    centred; longest: top of the histogram of durations, in samples. contrast_counts: float64,
    shape (realizations, bins over [−1, 1]). walls: float64, (realizations, 1 + bins): the number
    of sign changes of the contrast, then the durations between neighbours, a zero crossing
    taken to be where the straight line between two samples crosses zero.
    """
    realizations, _, samples = intensity.shape
    bins, lengths = contrast_counts.shape[1], walls.shape[1] - 1
    ahead = width // 2
    behind = width - 1 - ahead
    contrast = np.empty(samples)
    for r in range(realizations):
        u = intensity[r, 0]
        v = intensity[r, 1]
        p = q = 0.0
        for i in range(-behind, ahead + 1):
            p += u[i % samples]
            q += v[i % samples]
        enter, leave = (ahead + 1) % samples, (-behind) % samples
        for i in range(samples):
            total = p + q
            contrast[i] = (p - q) / total if total > 0.0 else 0.0
            p += np.float64(u[enter]) - np.float64(u[leave])
            q += np.float64(v[enter]) - np.float64(v[leave])
            enter = enter + 1 if enter + 1 < samples else 0
            leave = leave + 1 if leave + 1 < samples else 0
        first = last = -1.0
        for i in range(samples):
            here = contrast[i]
            contrast_counts[r, min(max(int((here + 1.0) * (0.5 * bins)), 0), bins - 1)] += 1.0
            after = contrast[i + 1 if i + 1 < samples else 0]
            if (here >= 0.0) != (after >= 0.0):
                at = i + here / (here - after)
                walls[r, 0] += 1.0
                if first < 0.0:
                    first = at
                elif at - last <= longest:
                    walls[r, 1 + min(int((at - last) / longest * lengths), lengths - 1)] += 1.0
                last = at
        if walls[r, 0] > 1.0 and first + samples - last <= longest:
            around = (first + samples - last) / longest
            walls[r, 1 + min(int(around * lengths), lengths - 1)] += 1.0


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def map_levels(powers: Real, scale_w: float) -> np.ndarray:
    """An evolution map as levels, uint8, shape (3, rows, columns).

    powers: W, shape (rows, 2, columns). Contrast from −1 (0) to 1 (255), 128 where it is dark;
    then the two powers in steps of scale_w, up to 255.
    """
    rows, _, columns = powers.shape
    levels = np.empty((3, rows, columns), dtype=np.uint8)
    for row in range(rows):
        for column in range(columns):
            first, second = powers[row, 0, column], powers[row, 1, column]
            total = first + second
            contrast = (first - second) / total if total > 0.0 else 0.0
            levels[0, row, column] = np.uint8(127.5 * (contrast + 1.0) + 0.5)
            levels[1, row, column] = np.uint8(min(first / scale_w + 0.5, 255.0))
            levels[2, row, column] = np.uint8(min(second / scale_w + 0.5, 255.0))
    return levels
