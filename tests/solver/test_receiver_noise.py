"""The receiver's noise: bandwidths against tables, thermal, shot and quantization noise."""

import numpy as np
import pytest
from scipy.integrate import quad

from solver.grid import Grid
from solver.receiver import noise_of, noise_variance, noisy, power_transfer
from solver.receiving import Receiver
from tests.checks import check

Q, BOLTZMANN = 1.602_176_634e-19, 1.380_649e-23
GRID = Grid(4096, 0.5)
TABLES = {
    "gaussian": (np.sqrt(np.pi / np.log(2.0)) / 2.0, "√(π/ln 2)/2, integral of a Gaussian", 1e-9),
    "butterworth4": ((np.pi / 8) / np.sin(np.pi / 8), "(π/2n)/sin(π/2n), n = 4", 1e-9),
    "bessel4": (1.0463, "tables of filter noise bandwidths, four digits, from memory", 2e-4),
}
"""Noise bandwidth over the −3 dB frequency, where it is from, and how many digits it has."""
BOOK = "Agrawal, Fiber-Optic Communication Systems, ch. on receivers"


@pytest.mark.parametrize("shape", TABLES)
def test_noise_bandwidth(shape: str) -> None:
    """∫|H|²df over the −3 dB frequency, by adaptive quadrature."""
    receiver = Receiver(filter=shape, bandwidth_ghz=1.0)
    found = quad(lambda f: float(power_transfer(receiver, np.array(f))), 0.0, np.inf)[0]
    ratio, source, digits = TABLES[shape]
    check(f"noise bandwidth, {shape}", source, abs(found / ratio - 1.0), digits)


def _drawn_variance(receiver: Receiver, power_w: float) -> tuple[float, float, float]:
    """Variance of the drawn noise on arm 1, its standard error, and what the solver expects, W²."""
    power = np.full((48, 2, GRID.samples), power_w)
    mean = power.mean(axis=(0, 2))
    noise = noise_of(receiver, mean, GRID)
    draws = np.random.default_rng(8).standard_normal(power.shape)
    seen = noisy(power, receiver, noise, GRID, draws)
    rows = ((seen[:, 0] - power_w) ** 2).mean(axis=1)
    expected = noise_variance(receiver, noise, mean, GRID)[0, 0]
    return float(rows.mean()), float(rows.std(ddof=1) / np.sqrt(rows.size)), float(expected)


@pytest.mark.parametrize("shape", TABLES)
def test_thermal_noise(shape: str) -> None:
    """4kT/R × B_n of 50 Ω at 300 K, in A²; drawn noise within its standard error."""
    density_a2_per_hz = 4.0 * BOLTZMANN * 300.0 / 50.0
    responsivity, bandwidth = 0.7, 25.0
    receiver = Receiver(
        filter=shape,
        bandwidth_ghz=bandwidth,
        responsivity_a_per_w=responsivity,
        thermal_pa_per_sqrt_hz=1e12 * np.sqrt(density_a2_per_hz),
    )
    drawn, error, expected = _drawn_variance(receiver, 1e-3)
    formula = density_a2_per_hz * TABLES[shape][0] * bandwidth * 1e9 / responsivity**2
    check("thermal noise: variance", f"4kT/R·B_n; {BOOK}", abs(expected / formula - 1.0), 2e-3)
    check(
        "thermal noise: drawn variance",
        f"4kT/R·B_n; {BOOK}",
        abs(drawn - formula) / error,
        4.0,
        "σ",
    )


@pytest.mark.parametrize("received_mw", [None, 0.02])
@pytest.mark.parametrize("shape", TABLES)
def test_shot_noise(shape: str, received_mw: float | None) -> None:
    """2qI × B_n in A²; an attenuator before the diodes raises it against the signal."""
    responsivity, bandwidth, power_w = 0.7, 25.0, 1e-3
    receiver = Receiver(
        filter=shape,
        bandwidth_ghz=bandwidth,
        responsivity_a_per_w=responsivity,
        shot_noise="on",
        received_mw=received_mw,
    )
    drawn, error, expected = _drawn_variance(receiver, power_w)
    attenuation = 1.0 if received_mw is None else 1e-3 * received_mw / (2.0 * power_w)
    current_a = responsivity * power_w * attenuation
    noise_a2 = 2.0 * Q * current_a * TABLES[shape][0] * bandwidth * 1e9
    formula = noise_a2 / (responsivity * attenuation) ** 2
    check("shot noise: variance", f"2qI·B_n; {BOOK}", abs(expected / formula - 1.0), 2e-3)
    check("shot noise: drawn variance", f"2qI·B_n; {BOOK}", abs(drawn - formula) / error, 4.0, "σ")


@pytest.mark.parametrize("bits", [8, 10, 12, 14])
def test_quantization(bits: int) -> None:
    """A sine over the full scale: signal to noise 6.02 N + 1.76 dB.

    With few bits the sine lingers at the levels of its turning points: 0.2 dB at 6 bits.
    """
    grid = Grid(2**16, 1.0)
    receiver = Receiver(effective_bits=float(bits))
    mean = np.ones(2)
    noise = noise_of(receiver, mean, grid)
    full_scale = 2.0**bits * noise.step_w[0]
    cycles = 1237  # prime to the samples, so that all phases of the sine are met
    sine = np.sin(2.0 * np.pi * cycles * np.arange(grid.samples) / grid.samples)
    # The range of the digitizer reaches from an eighth of it below zero to seven eighths.
    wave = full_scale * (0.375 + 0.5 * sine)
    power = np.broadcast_to(wave, (1, 2, grid.samples))
    seen = noisy(power, receiver, noise, grid, None)[0, 0]
    found = 10.0 * np.log10(wave.var() / np.mean((seen - wave) ** 2))
    check(
        "quantization noise of a full-scale sine",
        "6.02 N + 1.76 dB; Bennett, Bell Syst. Tech. J. 27, 446 (1948)",
        abs(found - (6.02 * bits + 1.76)),
        0.15,
        "dB",
    )
    assert np.unique(seen).size <= 2**bits + 1
    check(
        "quantization noise against step²/12",
        "Bennett, Bell Syst. Tech. J. 27, 446 (1948)",
        abs(np.mean((seen - wave) ** 2) / (noise.step_w[0] ** 2 / 12.0) - 1.0),
        0.04,
    )
