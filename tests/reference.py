"""Plain numpy oracles: slow, obvious, and written without looking at the compiled code.

Kernels carry the name of the compiled one they stand beside. Exact solutions say where they
were published; every one of them is also put into the equation it solves by a test.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.integrate import solve_ivp

from solver.experiment import Span

Array = npt.NDArray[np.complex128]
Real = npt.NDArray[np.float64]


def kerr_rotation(field: Array, self_phase: float, cross_phase: float) -> Array:
    """The exact Kerr flow of fields of shape (realizations, 2, samples)."""
    field = np.asarray(field, dtype=np.complex128)
    power = np.abs(field) ** 2
    return field * np.exp(1j * (self_phase * power + cross_phase * power[:, ::-1]))


def linear_flow(spectrum: Array, operator: Array) -> Array:
    """Every realization times one operator of shape (2, samples)."""
    return np.asarray(spectrum, dtype=np.complex128) * np.asarray(operator, dtype=np.complex128)


def band_share(spectrum: Array, first: int, last: int) -> float:
    """Largest share of a realization's energy in bins first to last − 1; nan if any is not."""
    density = np.abs(np.asarray(spectrum, np.complex128)) ** 2
    inside, whole = density[:, :, first:last].sum(axis=(1, 2)), density.sum(axis=(1, 2))
    shares = [part / all_ if all_ > 0.0 else all_ for part, all_ in zip(inside, whole, strict=True)]
    return float(np.max(shares)) if np.isfinite(whole).all() else float("nan")


def column_powers(field: Array, columns: int) -> Real:
    """Mean power about equally spaced times; shape (2, columns)."""
    return _columns(np.abs(np.asarray(field, dtype=np.complex128)) ** 2, columns)


def _columns(values: Real, columns: int) -> Real:
    """Trapezoidal means of periodic values, from half way before each time to half way after."""
    width = values.shape[-1] // columns
    half = width // 2
    total = sum(np.roll(values, -i, axis=-1) for i in range(-half, half + 1))
    if width % 2 == 0:
        total = total - 0.5 * (np.roll(values, half, axis=-1) + np.roll(values, -half, axis=-1))
    return np.asarray(total[..., ::width] / width)


def intensity_moments(field: Array) -> Real:
    """Time means of I1, I2, I1², I2², I1·I2; shape (realizations, 5)."""
    i1, i2 = np.moveaxis(np.abs(np.asarray(field, dtype=np.complex128)) ** 2, 1, 0)
    return np.stack([np.mean(x, axis=1) for x in (i1, i2, i1 * i1, i2 * i2, i1 * i2)], axis=1)


def smoothed_contrast(intensity: Real, width: int) -> Real:
    """Contrast of running means over ``width`` samples; shape (realizations, samples)."""
    samples = intensity.shape[2]
    window = np.zeros(samples)
    window[:width] = 1.0 / width
    transfer = np.fft.rfft(np.roll(window, -(width // 2)))
    smooth = np.fft.irfft(np.fft.rfft(np.asarray(intensity, np.float64)) * transfer, n=samples)
    total = smooth[:, 0] + smooth[:, 1]
    return np.asarray((smooth[:, 0] - smooth[:, 1]) / np.where(total > 0.0, total, 1.0))


def wall_places(contrast: Real) -> list[Real]:
    """Where each realization's periodic contrast changes sign, in samples."""
    following = np.roll(contrast, -1, axis=1)
    crossed = (contrast >= 0.0) != (following >= 0.0)
    places = []
    for row, after, where in zip(contrast, following, crossed, strict=True):
        at = np.flatnonzero(where)
        places.append(at + row[at] / (row[at] - after[at]))
    return places


def domain_counts(
    intensity: Real,
    width: int,
    longest: float,
    contrast: Real,
    contrast_counts: Real,
    walls: Real,
) -> None:
    """Contrast and its histogram; number of walls, sum of their widths, histogram of durations."""
    contrast[:] = smoothed_contrast(intensity, width)
    edges = np.linspace(0.0, longest, walls.shape[1] - 1)
    for row, values, places in zip(walls, contrast, wall_places(contrast), strict=True):
        row[0] += len(places)
        before = np.floor(places).astype(int) % len(values)
        slopes = np.abs(values[(before + 1) % len(values)] - values[before])
        row[1] += np.minimum(2.0 / slopes, longest).sum()
        if len(places) > 1:
            durations = np.diff(places, append=places[0] + contrast.shape[1])
            row[2:] += np.histogram(durations, edges)[0]
    edges = np.linspace(-1.0, 1.0, contrast_counts.shape[1] + 1)
    for row, values in zip(contrast_counts, contrast, strict=True):
        row += np.histogram(np.clip(values, -1.0, 1.0), edges)[0]


def map_levels(powers: Real, scale_w: float) -> npt.NDArray[np.uint8]:
    """Levels of contrast, both powers and S2, S3 if given, rounded half up."""
    first, second, *rest = np.moveaxis(powers, 1, 0)
    part = 1.0 / np.where(first + second > 0.0, first + second, np.inf)
    shares = [127.5 * (np.clip(x * part, -1.0, 1.0) + 1.0) for x in (first - second, *rest)]
    levels = [shares[0], first / scale_w, second / scale_w, *shares[1:]]
    return np.minimum(np.floor(np.stack(levels) + 0.5), 255.0).astype(np.uint8)


def field_walls(field: Array, width: int) -> Real:
    """Number of walls of each realization, from its fields."""
    power = np.abs(np.asarray(field, dtype=np.complex128)) ** 2
    return np.array([len(places) for places in wall_places(smoothed_contrast(power, width))], float)


def stokes(field: Array) -> Real:
    """S0 to S3 of fields of shape (…, 2, samples); shape (…, 4, samples)."""
    u, v = np.moveaxis(np.asarray(field, dtype=np.complex128), -2, 0)
    p, q, product = np.abs(u) ** 2, np.abs(v) ** 2, 2.0 * np.conj(u) * v
    return np.stack([p + q, p - q, product.real, product.imag], axis=-2)


def sphere_counts(field: Array, counts: Real) -> Real:
    """Histogram over the Poincaré sphere, of S3/S0 and the angle of (S1, S2); mean of S0 to S3."""
    found = stokes(field)
    ends = [np.linspace(-1.0, 1.0, counts.shape[1] + 1)]
    ends.append(np.linspace(-np.pi, np.pi, counts.shape[2] + 1))
    for row, (s0, s1, s2, s3) in zip(counts, found, strict=True):
        lit = s0 > 0.0
        height = np.clip(s3[lit] / s0[lit], -1.0, 1.0)
        row += np.histogram2d(height, np.arctan2(s2, s1)[lit], ends)[0]
    return np.asarray(found.mean(axis=-1))


def local_polarization(field: Array, width: int) -> Real:
    """Time mean of the degree of polarization of running means over ``width`` samples."""
    found = stokes(field)
    running = sum(np.roll(found, -shift, axis=2) for shift in range(width))
    s0 = running[:, 0]
    degree = np.linalg.norm(running[:, 1:], axis=1) / np.where(s0 > 0.0, s0, 1.0)
    return np.asarray(np.where(s0 > 0.0, degree, 0.0).mean(axis=1))


def intensity_counts(intensity: Real, mean_w: Real, top: float, counts: Real) -> None:
    """Histograms of I1, I2 and their sum, each over its mean."""
    edges = np.linspace(0.0, top, counts.shape[2] + 1)
    for rows, (first, second) in zip(counts, np.asarray(intensity, np.float64), strict=True):
        values = (first, second, first + second)
        for row, value, mean in zip(rows, values, (*mean_w, sum(mean_w)), strict=True):
            if mean > 0.0:
                row += np.histogram(value[value < top * mean] / mean, edges)[0]


def quadrature_counts(field: Array, deviation: Real, top: float, counts: Real) -> None:
    """Histogram of real and imaginary parts of both components over their deviations."""
    edges = np.linspace(-top, top, counts.shape[1] + 1)
    for row, components in zip(counts, np.asarray(field, np.complex128), strict=True):
        for line, size in zip(components, deviation, strict=True):
            if size > 0.0:
                values = np.concatenate([line.real, line.imag]) / size
                row += np.histogram(values[values < top], edges)[0]


def spectral_lines(spectrum: Array, kept: int, density: Real, sums: Real) -> None:
    """Line powers by optical frequency, in bins and in sums."""
    samples = spectrum.shape[2]
    power = np.abs(np.asarray(spectrum, np.complex128)) ** 2
    offset = -np.rint(np.fft.fftfreq(samples) * samples)
    order = np.argsort(offset)
    offset, power = offset[order], power[..., order]
    parts = [power, offset * power, offset**2 * power, power[..., 1:] * power[..., :-1]]
    sums[:] = np.stack([part.sum(axis=2) for part in parts], axis=-1)
    edges = np.linspace(0.5 - kept / 2, 0.5 + kept / 2, density.shape[2] + 1)
    flat = density.reshape(-1, density.shape[2])
    for row, lines in zip(flat, power.reshape(-1, samples), strict=True):
        row += np.histogram(offset, edges, weights=lines)[0] / (kept // density.shape[2])


def column_stokes(field: Array, columns: int) -> Real:
    """Means of both powers, S2 and S3 about equally spaced times; shape (4, columns)."""
    return np.concatenate([column_powers(field, columns), _columns(stokes(field), columns)[2:]])


@dataclass(frozen=True)
class Glass:
    """Coefficients of one piece of fibre, α in 1/km, worked out without the solver."""

    length_km: float
    beta2: float = 0.0
    beta3: float = 0.0
    alpha: float = 0.0
    gamma: float = 0.0
    own: float = 8 / 9
    other: float = 8 / 9
    delay: float = 0.0

    def span(self) -> Span:
        """The same piece in the solver's words."""
        return Span(
            length_km=self.length_km,
            beta2_ps2_per_km=self.beta2,
            beta3_ps3_per_km=self.beta3,
            loss_db_per_km=self.alpha * 10.0 / np.log(10.0),
            gamma_per_w_km=self.gamma,
            coupling="custom",
            self_coefficient=self.own,
            cross_coefficient=self.other,
            delay_ps_per_km=self.delay,
        )

    def rate(self, omega: Real) -> Array:
        """Linear operator in the Fourier domain, 1/km; shape (2, samples)."""
        common = -self.alpha / 2 + 1j * (self.beta2 * omega**2 / 2 - self.beta3 * omega**3 / 6)
        return np.stack([common - 0.5j * self.delay * omega, common + 0.5j * self.delay * omega])

    def kerr(self, field: Array) -> Array:
        """The Kerr term of the equation, components on the last axis but one."""
        power = np.abs(field) ** 2
        turned = self.own * power + self.other * np.flip(power, axis=-2)
        return np.asarray(1j * self.gamma * turned * field)


def angular_frequency(samples: int, time_step_ps: float) -> Real:
    """rad/ps, in FFT order."""
    return 2.0 * np.pi * np.fft.fftfreq(samples, time_step_ps)


def time_axis(samples: int, time_step_ps: float) -> Real:
    """ps, zero in the middle."""
    return (np.arange(samples) - samples // 2) * time_step_ps


def derivative(field: Array, time_step_ps: float) -> Array:
    """∂/∂t along the last axis of a periodic field."""
    omega = angular_frequency(field.shape[-1], time_step_ps)
    return np.asarray(np.fft.ifft(1j * omega * np.fft.fft(field)))


def right_side(field: Array, time_step_ps: float, glass: Glass) -> Array:
    """∂A/∂z of fields of shape (…, 2, samples), term by term in the time domain."""
    first = derivative(field, time_step_ps)
    second = derivative(first, time_step_ps)
    third = derivative(second, time_step_ps)
    sign = np.array([[1.0], [-1.0]])
    return np.asarray(
        -glass.alpha / 2 * field
        - sign * glass.delay / 2 * first
        - 0.5j * glass.beta2 * second
        + glass.beta3 / 6 * third
        + glass.kerr(field)
    )


def split_step(field: Array, time_step_ps: float, line: list[Glass], steps: int) -> Array:
    """Symmetric second-order splitting, ``steps`` equal steps in each piece of the line."""
    field = np.array(field, dtype=np.complex128)
    omega = angular_frequency(field.shape[-1], time_step_ps)
    for glass in line:
        h = glass.length_km / steps
        half = 0.5 * h * glass.gamma
        flow = np.exp(glass.rate(omega) * h)
        for _ in range(steps):
            field = kerr_rotation(field, half * glass.own, half * glass.other)
            field = np.fft.ifft(flow * np.fft.fft(field))
            field = kerr_rotation(field, half * glass.own, half * glass.other)
    return field


def integrate(field: Array, time_step_ps: float, line: list[Glass], rtol: float) -> Array:
    """One field of shape (2, samples) down a line, by DOP853 in the interaction picture.

    The integrator knows nothing of splitting: a(z) = e^{−Lz}Â(z) obeys a' = e^{−Lz} F[Kerr].
    """
    shape = field.shape
    omega = angular_frequency(shape[-1], time_step_ps)
    spectrum = np.fft.fft(field).astype(np.complex128)
    for glass in line:
        rate = glass.rate(omega)

        def slope(z: float, a: Array, rate: Array = rate, glass: Glass = glass) -> Array:
            flow = np.exp(rate * z)
            here = np.fft.ifft(flow * a.reshape(shape))
            return np.asarray((np.fft.fft(glass.kerr(here)) / flow).ravel())

        size = float(np.sqrt(np.mean(np.abs(spectrum) ** 2)))
        solution = solve_ivp(
            slope,
            (0.0, glass.length_km),
            spectrum.ravel(),
            method="DOP853",
            t_eval=[glass.length_km],
            rtol=rtol,
            atol=rtol * size,
        )
        spectrum = np.exp(rate * glass.length_km) * solution.y[:, -1].reshape(shape)
    return np.asarray(np.fft.ifft(spectrum))


def hamiltonian(field: Array, time_step_ps: float, glass: Glass) -> float:
    """Invariant of a lossless piece: linear phase rates weighted by the spectrum, and Kerr energy.

    i∂A_j/∂z = −∂H/∂A_j* with H = Σ φ_j(ω)|Â_j|² + γ∫ c_self(|A_1|⁴ + |A_2|⁴)/2 + c_cross|A_1 A_2|²
    (standard form of coupled Schrödinger equations, e.g. Agrawal, Nonlinear Fiber Optics).
    """
    omega = angular_frequency(field.shape[-1], time_step_ps)
    density = np.abs(np.fft.fft(field)) ** 2 / field.shape[-1]
    linear = np.sum(glass.rate(omega).imag * density)
    p, q = np.abs(field) ** 2
    kerr = glass.gamma * np.sum(glass.own * (p**2 + q**2) / 2 + glass.other * p * q)
    return float((linear + kerr) * time_step_ps)


def momentum(field: Array, time_step_ps: float) -> float:
    """Σ ω|Â|² of both components, W·ps·rad/ps."""
    omega = angular_frequency(field.shape[-1], time_step_ps)
    density = np.abs(np.fft.fft(field)) ** 2 / field.shape[-1]
    return float(np.sum(omega * density) * time_step_ps)


def rms_width(density: Real, axis: Real) -> float:
    """Root-mean-square width of a density on an axis."""
    mean = np.sum(axis * density) / np.sum(density)
    return float(np.sqrt(np.sum((axis - mean) ** 2 * density) / np.sum(density)))


def relative_l2(field: Array, exact: Array) -> float:
    """Relative L2 distance."""
    return float(np.linalg.norm(np.ravel(field - exact)) / np.linalg.norm(np.ravel(exact)))


def manakov_soliton(time_ps: Real, z_km: float, glass: Glass, width_ps: float) -> Array:
    """Scalar profile of the bright vector soliton; multiply by any unit polarization vector.

    √P sech(t/T) e^{iγcPz/2} with γcPT² = |β2| (Manakov, Sov. Phys. JETP 38, 248, 1974).
    """
    strength = glass.gamma * glass.own
    power_w = abs(glass.beta2) / (strength * width_ps**2)
    return np.asarray(
        np.sqrt(power_w) / np.cosh(time_ps / width_ps) * np.exp(0.5j * strength * power_w * z_km)
    )


def manakov_pair(
    time_ps: Real, z_km: float, glass: Glass, k: tuple[complex, complex], polarization: Array
) -> Array:
    """Two colliding bright vector solitons, exactly; shape (2, samples).

    k: inverse width (real part, 1/ps) and velocity (imaginary part) of each. polarization:
    row j is the complex vector of soliton j that also fixes its place. The bilinear form of
    Radhakrishnan, Lakshmanan and Hietarinta, Phys. Rev. E 56, 2213 (1997), from memory; a test
    puts it into the equation.
    """
    mu = glass.gamma * glass.own / abs(glass.beta2)
    zeta = abs(glass.beta2) * z_km / 2
    k1, k2 = k
    c1, c2 = np.conj(k1), np.conj(k2)
    a1, a2 = polarization
    e1, e2 = (np.exp(x * (time_ps + 1j * x * zeta)) for x in (k1, k2))
    kappa11 = mu * np.vdot(a1, a1) / (k1 + c1)
    kappa12 = mu * np.vdot(a2, a1) / (k1 + c2)
    kappa21 = mu * np.vdot(a1, a2) / (k2 + c1)
    kappa22 = mu * np.vdot(a2, a2) / (k2 + c2)
    r1, r2 = kappa11 / (k1 + c1), kappa22 / (k2 + c2)
    cross = kappa12 / (k1 + c2)
    r3 = abs(k1 - k2) ** 2 * (kappa11 * kappa22 - kappa12 * kappa21)
    r3 /= (k1 + c1) * (k2 + c2) * abs(k1 + c2) ** 2
    d1 = (k1 - k2) * (a1 * kappa21 - a2 * kappa11) / ((k1 + c1) * (c1 + k2))
    d2 = (k2 - k1) * (a2 * kappa12 - a1 * kappa22) / ((k2 + c2) * (k1 + c2))
    p1, p2 = np.abs(e1) ** 2, np.abs(e2) ** 2
    below = 1 + p1 * r1 + 2 * (e1 * np.conj(e2) * cross).real + p2 * r2 + p1 * p2 * r3
    above = np.outer(a1, e1) + np.outer(a2, e2) + np.outer(d1, p1 * e2) + np.outer(d2, e1 * p2)
    return np.asarray(above / below)


def domain_walls(
    time_ps: Real, z_km: float, glass: Glass, amplitude: float, gap_ps: float
) -> Array:
    """A pair of polarization domain walls for c_self = 1, c_cross = 3, normal dispersion.

    u = (A/2)(1 + tanh κt), v = (A/2)(1 − tanh κt), both times e^{iγA²z}, κ² = γA²/β2, solve the
    equation exactly (own derivation: (1 − T + T²)(1 + T) = 1 + T³; solutions of this kind are
    due to Haelterman and Sheppard, Phys. Rev. E 49, 3389, 1994). Two walls a ``gap_ps`` apart
    make it periodic; they touch only by e^{−2κ·gap}.
    """
    kappa = np.sqrt(glass.gamma * amplitude**2 / glass.beta2)
    steps = np.tanh(kappa * (time_ps + gap_ps / 2)) - np.tanh(kappa * (time_ps - gap_ps / 2)) - 1.0
    phase = np.exp(1j * glass.gamma * amplitude**2 * z_km)
    return np.asarray(amplitude / 2 * phase * np.stack([1.0 + steps, 1.0 - steps]))


def stirred_light(
    seed: int, realizations: int, samples: int, time_step_ps: float, fwhm_thz: float, power_w: float
) -> Array:
    """Gaussian light of a Gaussian spectrum in both components, of this mean power in each."""
    stream = np.random.default_rng(seed)
    frequency = np.fft.fftfreq(samples, time_step_ps)
    amplitude = np.exp(-2.0 * np.log(2.0) * (frequency / fwhm_thz) ** 2)
    parts = stream.standard_normal((2, realizations, 2, samples))
    field = np.fft.ifft(amplitude * (parts[0] + 1j * parts[1]))
    mean = np.mean(np.abs(field) ** 2, axis=(0, 2), keepdims=True)
    return np.asarray(field * np.sqrt(power_w / mean))


def spectral_moments(spectrum: np.ndarray, passed: np.ndarray) -> np.ndarray:
    """Means of two intensities, their squares and product, by way of time.

    spectrum: rfft/samples, (realizations, 2, bins); passed: power transfer, twice where a bin
    stands for the negative frequency too.
    """
    stands_for = np.full(len(passed), 2.0)
    stands_for[[0, -1]] = 1.0
    samples = 2 * (len(passed) - 1)
    filtered = spectrum * np.sqrt(passed / stands_for)
    first, second = np.moveaxis(np.fft.irfft(filtered, n=samples, norm="forward"), 1, 0)
    products = [first, second, first**2, second**2, first * second]
    return np.stack([product.mean(axis=1) for product in products], axis=1)
