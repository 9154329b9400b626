"""Polarization demultiplexer and square-law detection with an electrical low-pass."""

import numpy as np
from scipy import fft

from solver.experiment import Receiver
from solver.grid import Complex, Field, Grid, Real
from solver.units import ratio_from_db


def demultiplexing(receiver: Receiver) -> Real:
    """Power transfer of the demultiplexer, shape (2 arms, 2 components)."""
    leak = 0.0 if receiver.extinction_db is None else ratio_from_db(receiver.extinction_db)
    return np.array([[1.0 - leak, leak], [leak, 1.0 - leak]])


def amplitude_transfer(receiver: Receiver, frequency_ghz: Real) -> Complex:
    """Complex electrical response H(f), H(0) = 1 and |H(bandwidth)|² = 1/2.

    gaussian: no delay. bessel4: H(s) = 105/(s⁴ + 10s³ + 45s² + 105s + 105), frequency scaled to
    its −3 dB point 2.113917675 (maximally flat delay; Thomson, Proc. IEE 96, 487, 1949), the
    delay at zero frequency removed. butterworth4: poles on a circle (Butterworth, 1930), its
    delay at zero frequency removed.
    """
    x = np.asarray(frequency_ghz, dtype=np.float64) / receiver.bandwidth_ghz
    match receiver.filter:
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


def power_transfer(receiver: Receiver, frequency_ghz: Real) -> Real:
    """|H(f)|², one half at the stated bandwidth."""
    return np.asarray(np.abs(amplitude_transfer(receiver, frequency_ghz)) ** 2)


def detect(field: Field, receiver: Receiver, grid: Grid) -> Real:
    """Detected intensities in W, shape (realizations, 2, samples), from fields in √W.

    They have the precision of the fields.
    """
    power = field.real**2 + field.imag**2
    if receiver.extinction_db is not None:
        power = np.einsum("jk,rkt->rjt", demultiplexing(receiver).astype(power.dtype), power)
    if receiver.filter != "none":
        frequency_ghz = np.fft.rfftfreq(grid.samples, grid.time_step_ps) * 1e3
        spectrum = fft.rfft(power)
        spectrum *= amplitude_transfer(receiver, frequency_ghz)
        power = fft.irfft(spectrum, n=grid.samples)
    return power
