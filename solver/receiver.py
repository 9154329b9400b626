"""Polarization demultiplexer and square-law detection with an electrical low-pass."""

from dataclasses import dataclass

import numpy as np
from scipy import fft

from solver.experiment import FilterShape, Receiver
from solver.grid import Complex, Field, Grid, Real
from solver.units import ratio_from_db

ELEMENTARY_CHARGE_C = 1.602_176_634e-19
"""Elementary charge (exact, SI)."""
FULL_SCALE = 8.0
"""Full scale of the digitizer, in units of the mean: thermal light exceeds it by e^-8."""


def demultiplexing(receiver: Receiver) -> Real:
    """Power transfer of the demultiplexer, shape (2 arms, 2 components)."""
    leak = 0.0 if receiver.extinction_db is None else ratio_from_db(receiver.extinction_db)
    return np.array([[1.0 - leak, leak], [leak, 1.0 - leak]])


def low_pass(shape: FilterShape, bandwidth_ghz: float, frequency_ghz: Real) -> Complex:
    """Complex electrical response H(f), H(0) = 1 and |H(bandwidth)|² = 1/2.

    gaussian: no delay. bessel4: H(s) = 105/(s⁴ + 10s³ + 45s² + 105s + 105), frequency scaled to
    its −3 dB point 2.113917675 (maximally flat delay; Thomson, Proc. IEE 96, 487, 1949), the
    delay at zero frequency removed. butterworth4: poles on a circle (Butterworth, 1930), its
    delay at zero frequency removed.
    """
    x = np.asarray(frequency_ghz, dtype=np.float64) / bandwidth_ghz
    match shape:
        case "none":
            return np.ones(x.shape, dtype=np.complex128)
        case "gaussian":
            return np.asarray(np.exp(-0.5 * np.log(2.0) * x**2), dtype=np.complex128)
        case "bessel4":
            s = 2.113917675 * 1j * x
            denominator = (((s + 10.0) * s + 45.0) * s + 105.0) * s + 105.0
            return np.asarray(105.0 / denominator * np.exp(s))
        case "butterworth4":
            s = 1j * x
            denominator = (s**2 + 2.0 * np.sin(np.pi / 8) * s + 1.0) * (
                s**2 + 2.0 * np.sin(3 * np.pi / 8) * s + 1.0
            )
            delay = 2.0 * (np.sin(np.pi / 8) + np.sin(3 * np.pi / 8))
            return np.asarray(np.exp(delay * s) / denominator)


def amplitude_transfer(receiver: Receiver, frequency_ghz: Real) -> Complex:
    """Electrical response of photodiode and digitizer in cascade."""
    diode = low_pass(receiver.filter, receiver.bandwidth_ghz, frequency_ghz)
    return diode * low_pass(
        receiver.digitizer_filter, receiver.digitizer_bandwidth_ghz, frequency_ghz
    )


def power_transfer(receiver: Receiver, frequency_ghz: Real) -> Real:
    """|H(f)|² of the cascade."""
    return np.asarray(np.abs(amplitude_transfer(receiver, frequency_ghz)) ** 2)


def is_filtered(receiver: Receiver) -> bool:
    """Whether there is any electrical low-pass."""
    return receiver.filter != "none" or receiver.digitizer_filter != "none"


def detect(field: Field, receiver: Receiver, grid: Grid) -> Real:
    """Detected intensities in W without noise, shape (realizations, 2, samples).

    They have the precision of the fields, √W.
    """
    return filtered(demultiplexed(field, receiver), receiver, grid)


def demultiplexed(field: Field, receiver: Receiver) -> Real:
    """Optical power on the two diodes, W, (realizations, 2, samples), from fields in √W."""
    power = field.real**2 + field.imag**2
    if receiver.extinction_db is not None:
        power = np.einsum("jk,rkt->rjt", demultiplexing(receiver).astype(power.dtype), power)
    return np.asarray(power)


def filtered(current: Real, receiver: Receiver, grid: Grid) -> Real:
    """What the electrical low-pass leaves of it."""
    if not is_filtered(receiver):
        return current
    frequency_ghz = np.fft.rfftfreq(grid.samples, grid.time_step_ps) * 1e3
    spectrum = fft.rfft(current)
    spectrum *= amplitude_transfer(receiver, frequency_ghz)
    return np.asarray(fft.irfft(spectrum, n=grid.samples))


@dataclass(frozen=True)
class Noise:
    """Noise of the two detected intensities, in W at the demultiplexer's output.

    shot_w: variance of white shot noise before the low-pass, on a given time step, is this
    times the power itself; thermal_w2: variance of white thermal noise there. step_w: of the
    quantization, shape (2,), 0 for none.
    """

    shot_w: float
    thermal_w2: float
    step_w: Real


def is_noisy(receiver: Receiver) -> bool:
    """Whether diodes or digitizer add anything to what they detect."""
    return (
        receiver.shot_noise == "on"
        or receiver.thermal_pa_per_sqrt_hz > 0.0
        or receiver.effective_bits is not None
    )


def noise_of(receiver: Receiver, mean_w: Real, grid: Grid) -> Noise:
    """Noise when the mean powers of the two arms are ``mean_w``, W, shape (2,).

    Shot noise has the two-sided density q·R·I, thermal noise half the stated one-sided one
    (Agrawal, Fiber-Optic Communication Systems, ch. on receivers); sampled every Δt, white noise
    of two-sided density S has the variance S/Δt. An attenuator sets the power on the diodes.
    """
    scale = 1.0
    if receiver.received_mw is not None:
        scale = 1e-3 * receiver.received_mw / float(mean_w.sum())
    responsivity = receiver.responsivity_a_per_w
    rate_hz = 1e12 / grid.time_step_ps
    shot = (
        ELEMENTARY_CHARGE_C * rate_hz / responsivity / scale if receiver.shot_noise == "on" else 0
    )
    density = (1e-12 * receiver.thermal_pa_per_sqrt_hz / responsivity / scale) ** 2
    step = np.zeros(2)
    if receiver.effective_bits is not None:
        step = FULL_SCALE * mean_w / 2.0**receiver.effective_bits
    return Noise(float(shot), 0.5 * density * rate_hz, step)


def noise_variance(receiver: Receiver, noise: Noise, mean_w: Real, grid: Grid) -> Real:
    """Expected autocovariance of the noise of each arm after the low-pass, W².

    Shape (2, samples), lags in FFT order. Quantization adds step²/12 at lag zero (Bennett, Bell
    Syst. Tech. J. 27, 446, 1948).
    """
    transfer = power_transfer(receiver, np.abs(grid.frequency_thz) * 1e3)
    shape = np.fft.ifft(transfer).real
    white = noise.shot_w * mean_w + noise.thermal_w2
    found = white[:, None] * shape
    found[:, 0] += noise.step_w**2 / 12.0
    return np.asarray(found)


def noisy(power: Real, receiver: Receiver, noise: Noise, grid: Grid, draws: Real | None) -> Real:
    """Detected intensities, W, from the optical power on the diodes.

    power, draws: shape (realizations, 2, samples); draws are standard normal, None without noise.
    """
    current = power
    if draws is not None:
        variance = noise.shot_w * np.maximum(power, 0.0) + noise.thermal_w2
        current = power + np.sqrt(variance, dtype=power.dtype) * draws
    seen = filtered(current, receiver, grid)
    if noise.step_w.any():
        step = noise.step_w[:, None].astype(seen.dtype)
        levels = round(2.0 ** (receiver.effective_bits or 0.0))
        # Room below zero: filtered noise goes there.
        lowest = -(levels // 8)
        seen = np.clip(np.rint(seen / step), lowest, lowest + levels) * step
    return np.asarray(seen)
