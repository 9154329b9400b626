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
    """Mean power of both components about equally spaced times; float64, shape (2, columns).

    field: complex, shape (2, samples), √W, periodic; columns divides samples. A column reaches
    from its time half way to its neighbours', by the trapezoidal rule, so that it stands for the
    same time whatever the samples.
    """
    samples = field.shape[1]
    width = samples // columns
    half, end = width // 2, 0.5 if width % 2 == 0 else 1.0
    powers = np.empty((2, columns))
    for j in range(2):
        line = field[j]
        for column in range(columns):
            total = 0.0
            for i in range(-half, half + 1):
                at = column * width + i
                a = line[at if at >= 0 else at + samples]
                real, imag = np.float64(a.real), np.float64(a.imag)
                weight = end if abs(i) == half else 1.0
                total += weight * (real * real + imag * imag)
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


@njit(cache=True, fastmath={"contract", "reassoc"}, error_model="numpy")
def spectral_moments(spectrum: Field, passed: Real) -> Real:
    """Time means of I1, I2, I1², I2², I1·I2 from spectra of intensities; (realizations, 5).

    spectrum: complex, shape (realizations, 2, bins), W, frequencies ≥ 0. passed: float64, shape
    (bins,), power transfer of each bin, twice where it stands for the negative frequency too.
    """
    realizations, _, bins = spectrum.shape
    moments = np.empty((realizations, 5))
    for r in range(realizations):
        u = spectrum[r, 0]
        v = spectrum[r, 1]
        p11 = p22 = p12 = 0.0
        for i in range(bins):
            ur, ui = np.float64(u[i].real), np.float64(u[i].imag)
            vr, vi = np.float64(v[i].real), np.float64(v[i].imag)
            weight = passed[i]
            p11 += weight * (ur * ur + ui * ui)
            p22 += weight * (vr * vr + vi * vi)
            p12 += weight * (ur * vr + ui * vi)
        moments[r, 0] = np.float64(u[0].real)
        moments[r, 1] = np.float64(v[0].real)
        moments[r, 2] = p11
        moments[r, 3] = p22
        moments[r, 4] = p12
    return moments


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def domain_counts(
    intensity: Real,
    width: int,
    longest: float,
    contrast: Real,
    contrast_counts: Real,
    walls: Real,
) -> None:
    """Contrast and walls of running means; counts go into arrays given as zeros.

    intensity: W, shape (realizations, 2, samples), periodic. width: samples in the running mean,
    centred; longest: top of the histogram of durations, in samples. contrast: filled, shape
    (realizations, samples). contrast_counts: float64, shape (realizations, bins over [−1, 1]).
    walls: float64, (realizations, 2 + bins): the number of sign changes of the contrast; the
    sum of their widths 2/|slope| in samples, none over ``longest``; then the durations between
    neighbours, a zero crossing taken to be where the straight line between two samples crosses
    zero.
    """
    realizations, _, samples = intensity.shape
    bins, lengths = contrast_counts.shape[1], walls.shape[1] - 2
    ahead = width // 2
    behind = width - 1 - ahead
    for r in range(realizations):
        u = intensity[r, 0]
        v = intensity[r, 1]
        c = contrast[r]
        p = q = 0.0
        for i in range(-behind, ahead + 1):
            p += u[i % samples]
            q += v[i % samples]
        enter, leave = (ahead + 1) % samples, (-behind) % samples
        for i in range(samples):
            total = p + q
            c[i] = (p - q) / total if total > 0.0 else 0.0
            p += np.float64(u[enter]) - np.float64(u[leave])
            q += np.float64(v[enter]) - np.float64(v[leave])
            enter = enter + 1 if enter + 1 < samples else 0
            leave = leave + 1 if leave + 1 < samples else 0
        first = last = -1.0
        for i in range(samples):
            here = np.float64(c[i])
            contrast_counts[r, min(max(int((here + 1.0) * (0.5 * bins)), 0), bins - 1)] += 1.0
            after = np.float64(c[i + 1 if i + 1 < samples else 0])
            if (here >= 0.0) != (after >= 0.0):
                at = i + here / (here - after)
                walls[r, 0] += 1.0
                walls[r, 1] += min(2.0 / abs(here - after), longest)
                if first < 0.0:
                    first = at
                elif at - last <= longest:
                    walls[r, 2 + min(int((at - last) / longest * lengths), lengths - 1)] += 1.0
                last = at
        if walls[r, 0] > 1.0 and first + samples - last <= longest:
            around = (first + samples - last) / longest
            walls[r, 2 + min(int(around * lengths), lengths - 1)] += 1.0


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def map_levels(powers: Real, scale_w: float) -> np.ndarray:
    """An evolution map as levels, uint8, shape (1 + given, rows, columns).

    powers: W, shape (rows, 2 or 4, columns): those of both components, S2 and S3. Contrast from −1
    (0) to 1 (255), 128 where it is dark; the two powers in steps of scale_w, up to 255; S2 and S3
    over the power like the contrast.
    """
    rows, given, columns = powers.shape
    levels = np.empty((1 + given, rows, columns), dtype=np.uint8)
    for row in range(rows):
        for column in range(columns):
            first, second = powers[row, 0, column], powers[row, 1, column]
            total = first + second
            part = 1.0 / total if total > 0.0 else 0.0
            levels[0, row, column] = np.uint8(127.5 * ((first - second) * part + 1.0) + 0.5)
            levels[1, row, column] = np.uint8(min(first / scale_w + 0.5, 255.0))
            levels[2, row, column] = np.uint8(min(second / scale_w + 0.5, 255.0))
            for k in range(2, given):
                share = min(max(powers[row, k, column] * part, -1.0), 1.0)
                levels[1 + k, row, column] = np.uint8(127.5 * (share + 1.0) + 0.5)
    return levels


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def field_walls(field: Field, width: int) -> Real:
    """Sign changes of the running mean of |u|² − |v|²; float64, shape (realizations,).

    field: complex, shape (realizations, 2, samples), √W, periodic. width: samples in the
    running mean, centred. The sign is that of the contrast, without a division.
    """
    realizations, _, samples = field.shape
    ahead = width // 2
    behind = width - 1 - ahead
    walls = np.zeros(realizations)
    difference = np.empty(samples + width)
    for r in range(realizations):
        u = field[r, 0]
        v = field[r, 1]
        for i in range(samples):
            ur, ui, vr, vi = u[i].real, u[i].imag, v[i].real, v[i].imag
            difference[behind + i] = (ur * ur + ui * ui) - (vr * vr + vi * vi)
        for i in range(behind):
            difference[i] = difference[samples + i]
        for i in range(ahead + 1):
            difference[samples + behind + i] = difference[behind + i]
        count = 0
        if width == 1:
            for i in range(samples):
                count += (difference[i] >= 0.0) != (difference[i + 1] >= 0.0)
        else:
            total = 0.0
            for i in range(width):
                total += difference[i]
            for i in range(samples):
                after = total + (difference[i + width] - difference[i])
                count += (total >= 0.0) != (after >= 0.0)
                total = after
        walls[r] = count
    return walls


@cache
def sphere_counts(dtype: Floating) -> Kernel:
    """Kernel ``count(field, counts)``: samples on the Poincaré sphere, and means of S0 to S3.

    field: complex, shape (realizations, 2, samples), √W. counts: float64, given as zeros, shape
    (realizations, bins of S3/S0 over [−1, 1], bins of the azimuth over (−π, π]). Every lit
    sample counts once. S1 = |u|² − |v|², S2 = 2 Re u*v, S3 = 2 Im u*v; azimuth: angle of (S1,
    S2), by the polynomial for the arctangent of Abramowitz and Stegun, 4.4.49 (error below
    2·10⁻⁸ rad, from memory). Returns float64, shape (realizations, 4), W.
    """
    a1, a2, a3, a4, a5, a6, a7, a8 = (
        dtype(factor)
        for factor in (
            -0.3333314528,
            0.1999355085,
            -0.1420889944,
            0.1065626393,
            -0.0752896400,
            0.0429096138,
            -0.0161657367,
            0.0028662257,
        )
    )
    zero, one, two = dtype(0.0), dtype(1.0), dtype(2.0)
    least = dtype(np.finfo(np.float32).tiny)
    quarter_turn, half_turn = dtype(0.5 * math.pi), dtype(math.pi)

    @njit(cache=True, fastmath={"contract", "reassoc"}, error_model="numpy")
    def count(field: Field, counts: Real) -> Real:
        realizations, _, samples = field.shape
        rows, columns = np.int32(counts.shape[1]), np.int32(counts.shape[2])
        last_row, last_column, none = rows - np.int32(1), columns - np.int32(1), np.int32(0)
        per_unit, per_rad = dtype(rows / 2.0), dtype(columns / (2.0 * math.pi))
        means = np.empty((realizations, 4))
        place = np.empty(samples, dtype=np.int32)
        for r in range(realizations):
            u = field[r, 0]
            v = field[r, 1]
            sum0 = sum1 = sum2 = sum3 = zero
            for i in range(samples):
                ur, ui, vr, vi = u[i].real, u[i].imag, v[i].real, v[i].imag
                p = ur * ur + ui * ui
                q = vr * vr + vi * vi
                s0, s1 = p + q, p - q
                s2, s3 = two * (ur * vr + ui * vi), two * (ur * vi - ui * vr)
                sum0 += s0
                sum1 += s1
                sum2 += s2
                sum3 += s3
                x, y = abs(s1), abs(s2)
                t = min(x, y) / max(max(x, y), least)
                w = t * t
                fifth = w * (a5 + w * (a6 + w * (a7 + w * a8)))
                angle = t * (one + w * (a1 + w * (a2 + w * (a3 + w * (a4 + fifth)))))
                angle = quarter_turn - angle if y > x else angle
                angle = half_turn - angle if s1 < zero else angle
                angle = -angle if s2 < zero else angle
                row = np.int32((s3 / max(s0, least) + one) * per_unit)
                column = np.int32((angle + half_turn) * per_rad)
                row = min(max(row, none), last_row)
                column = min(max(column, none), last_column)
                place[i] = row * columns + column if s0 > zero else np.int32(-1)
            flat = counts[r].reshape(-1)
            for i in range(samples):
                if place[i] >= 0:
                    flat[place[i]] += 1.0
            means[r, 0], means[r, 1] = sum0 / samples, sum1 / samples
            means[r, 2], means[r, 3] = sum2 / samples, sum3 / samples
        return means

    return count


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def intensity_counts(intensity: Real, mean_w: Real, top: float, counts: Real) -> None:
    """Histograms of I1, I2 and I1 + I2 over their means, into an array given as zeros.

    intensity: W, shape (realizations, 2, samples). mean_w: W, shape (2,). counts: float64,
    shape (realizations, 3, bins over [0, top)); what lies outside is left out.
    """
    realizations, _, samples = intensity.shape
    bins = counts.shape[2]
    scales = np.empty(3)
    for j in range(3):
        mean = mean_w[0] + mean_w[1] if j == 2 else mean_w[j]
        scales[j] = bins / (top * mean) if mean > 0.0 else math.nan
    scale1, scale2, scale3 = scales
    for r in range(realizations):
        u = intensity[r, 0]
        v = intensity[r, 1]
        first, second, both = counts[r, 0], counts[r, 1], counts[r, 2]
        for i in range(samples):
            x, y, z = u[i] * scale1, v[i] * scale2, (u[i] + v[i]) * scale3
            if 0.0 <= x < bins:
                first[int(x)] += 1.0
            if 0.0 <= y < bins:
                second[int(y)] += 1.0
            if 0.0 <= z < bins:
                both[int(z)] += 1.0


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def quadrature_counts(field: Field, deviation: Real, top: float, counts: Real) -> None:
    """Histogram of real and imaginary parts over their standard deviation, both components.

    field: complex, shape (realizations, 2, samples), √W. deviation: √W, shape (2,). counts:
    float64, given as zeros, shape (realizations, bins over [−top, top)); the rest is left out.
    """
    realizations, components, samples = field.shape
    bins = counts.shape[1]
    middle = 0.5 * bins
    for r in range(realizations):
        row = counts[r]
        for j in range(components):
            line = field[r, j]
            size = deviation[j] * 2.0 * top
            scale = bins / size if size > 0.0 else math.nan
            for i in range(samples):
                x, y = line[i].real * scale + middle, line[i].imag * scale + middle
                if 0.0 <= x < bins:
                    row[int(x)] += 1.0
                if 0.0 <= y < bins:
                    row[int(y)] += 1.0


@njit(cache=True, fastmath={"contract", "reassoc"}, error_model="numpy")
def spectral_lines(spectrum: Field, kept: int, density: Real, sums: Real) -> None:
    """Powers of spectral lines in order of optical frequency, binned, and sums over all of them.

    spectrum: complex, shape (realizations, 2, samples), FFT order, √W. density: float64, given
    as zeros, shape (realizations, 2, bins): mean power of the lines in each bin, the bins
    sharing the ``kept`` lines about the carrier. sums: float64, (realizations, 2, 4): Σp, Σfp,
    Σf²p and Σp_k p_{k+1}, f counted in lines above the carrier.
    """
    realizations, components, samples = spectrum.shape
    bins = density.shape[2]
    width = kept // bins
    top = samples // 2 - 1  # baseband frequency of the lowest line on the optical axis
    outside = kept // 2 - 1 - top  # places in front of the first line, negative to leave some out
    line_powers = np.empty(samples)
    for r in range(realizations):
        for j in range(components):
            line = spectrum[r, j]
            for i in range(samples):
                k = top - i
                value = line[k if k >= 0 else k + samples]
                real, imag = np.float64(value.real), np.float64(value.imag)
                line_powers[i] = real * real + imag * imag
            total = first = second = pairs = 0.0
            for i in range(samples):
                p = line_powers[i]
                f = np.float64(i - top)
                total += p
                first += f * p
                second += f * f * p
            for i in range(1, samples):
                pairs += line_powers[i - 1] * line_powers[i]
            sums[r, j, 0], sums[r, j, 1] = total, first
            sums[r, j, 2], sums[r, j, 3] = second, pairs
            row = density[r, j]
            for i in range(max(0, -outside), min(samples, kept - outside)):
                row[(i + outside) // width] += line_powers[i] / width


@njit(cache=True, fastmath={"contract", "reassoc"}, error_model="numpy")
def column_stokes(field: Field, columns: int) -> Real:
    """Means of |u|², |v|², S2 and S3 about equally spaced times; float64, shape (4, columns).

    field: complex, shape (2, samples), √W, periodic; columns divides samples. Columns as in
    column_powers, signs as in sphere_counts.
    """
    samples = field.shape[1]
    width = samples // columns
    half, end = width // 2, 0.5 if width % 2 == 0 else 1.0
    means = np.empty((4, columns))
    for column in range(columns):
        p = q = s2 = s3 = 0.0
        for i in range(-half, half + 1):
            at = column * width + i
            at = at if at >= 0 else at + samples
            weight = end if abs(i) == half else 1.0
            ur, ui = np.float64(field[0, at].real), np.float64(field[0, at].imag)
            vr, vi = np.float64(field[1, at].real), np.float64(field[1, at].imag)
            p += weight * (ur * ur + ui * ui)
            q += weight * (vr * vr + vi * vi)
            s2 += weight * 2.0 * (ur * vr + ui * vi)
            s3 += weight * 2.0 * (ur * vi - ui * vr)
        means[0, column], means[1, column] = p / width, q / width
        means[2, column], means[3, column] = s2 / width, s3 / width
    return means


@njit(cache=True, fastmath={"contract"}, error_model="numpy")
def local_polarization(field: Field, width: int) -> Real:
    """Time mean of |⟨S⟩|/⟨S0⟩, ⟨⟩ running means; float64, shape (realizations,).

    field: complex, shape (realizations, 2, samples), √W, periodic. width: samples in the
    running means. Moments whose running mean is dark count as unpolarized.
    """
    realizations, _, samples = field.shape
    stokes = np.empty((4, samples + width))
    found = np.empty(realizations)
    for r in range(realizations):
        u = field[r, 0]
        v = field[r, 1]
        for i in range(samples):
            ur, ui = np.float64(u[i].real), np.float64(u[i].imag)
            vr, vi = np.float64(v[i].real), np.float64(v[i].imag)
            p, q = ur * ur + ui * ui, vr * vr + vi * vi
            stokes[0, i], stokes[1, i] = p + q, p - q
            stokes[2, i], stokes[3, i] = 2.0 * (ur * vr + ui * vi), 2.0 * (ur * vi - ui * vr)
        for i in range(width):
            for k in range(4):
                stokes[k, samples + i] = stokes[k, i % samples]
        s0 = s1 = s2 = s3 = 0.0
        for i in range(width):
            s0 += stokes[0, i]
            s1 += stokes[1, i]
            s2 += stokes[2, i]
            s3 += stokes[3, i]
        total = 0.0
        for i in range(samples):
            if s0 > 0.0:
                total += min(math.sqrt(s1 * s1 + s2 * s2 + s3 * s3) / s0, 1.0)
            s0 += stokes[0, i + width] - stokes[0, i]
            s1 += stokes[1, i + width] - stokes[1, i]
            s2 += stokes[2, i + width] - stokes[2, i]
            s3 += stokes[3, i + width] - stokes[3, i]
        found[r] = total / samples
    return found
