"""The receiver's filters and demultiplexer."""

import numpy as np
import pytest
from scipy import signal

from solver.experiment import Receiver
from solver.grid import Grid
from solver.receiver import amplitude_transfer, demultiplexing, detect, power_transfer
from tests.checks import check

FILTERS = ["gaussian", "bessel4", "butterworth4"]
FREQUENCY = np.linspace(0.0, 100.0, 401)


@pytest.mark.parametrize("shape", FILTERS)
@pytest.mark.parametrize("bandwidth", [5.0, 33.0])
def test_half_power_at_the_bandwidth(shape: str, bandwidth: float) -> None:
    """|H(0)| = 1, |H(bandwidth)|² = 1/2, falling all the way."""
    receiver = Receiver(filter=shape, bandwidth_ghz=bandwidth)
    at = power_transfer(receiver, np.array([0.0, bandwidth]))
    np.testing.assert_allclose(at, [1.0, 0.5], rtol=1e-8)
    assert np.all(np.diff(power_transfer(receiver, FREQUENCY)) < 0.0)


@pytest.mark.parametrize("shape", ["bessel4", "butterworth4"])
def test_against_a_filter_library(shape: str) -> None:
    """scipy's analogue prototypes; ours have the delay at zero frequency taken out."""
    bandwidth = 20.0
    if shape == "bessel4":
        b, a = signal.bessel(4, bandwidth, analog=True, norm="mag")
    else:
        b, a = signal.butter(4, bandwidth, analog=True)
    _, expected = signal.freqs(b, a, FREQUENCY)
    found = amplitude_transfer(Receiver(filter=shape, bandwidth_ghz=bandwidth), FREQUENCY)
    check(
        f"electrical low-pass, {shape}: amplitude against frequency",
        "scipy.signal's analogue prototype",
        np.abs(np.abs(found) / np.abs(expected) - 1.0).max(),
        1e-7,
    )
    turned = found / expected
    delay = np.polyfit(FREQUENCY[1:], np.unwrap(np.angle(turned))[1:], 1)[0]
    np.testing.assert_allclose(turned, np.exp(1j * delay * FREQUENCY), atol=1e-6)
    assert np.angle(found[1]) == pytest.approx(0.0, abs=1e-5)


@pytest.mark.parametrize("shape", ["none", *FILTERS])
def test_detection_keeps_the_mean_and_the_place(shape: str) -> None:
    """Mean power passes; a slow bump stays where it was; the fast part is damped as |H| says."""
    grid = Grid(1024, 2.0)
    receiver = Receiver(filter=shape, bandwidth_ghz=20.0)
    cycles = 40
    fast = 1.0 + 0.5 * np.cos(2.0 * np.pi * cycles * np.arange(1024) / 1024)
    field = np.sqrt(np.stack([fast, np.exp(-(((grid.time_ps - 1000.0) / 150.0) ** 2))]))[None]
    seen = detect(field, receiver, grid)
    assert seen.shape == (1, 2, 1024)
    np.testing.assert_allclose(seen.mean(axis=2), (field**2).mean(axis=2), rtol=1e-12)
    assert np.argmax(seen[0, 1]) == pytest.approx(500, abs=1)
    depth = np.abs(np.fft.rfft(seen[0, 0])[cycles]) / np.abs(np.fft.rfft(fast)[cycles])
    frequency = np.array([cycles / grid.window_ps * 1e3])
    assert depth == pytest.approx(np.sqrt(power_transfer(receiver, frequency)[0]), rel=1e-9)


def test_demultiplexer_leaks_power() -> None:
    """−20 dB puts one hundredth of each component into the other's arm, and keeps the sum."""
    receiver = Receiver(extinction_db=-20.0)
    np.testing.assert_allclose(demultiplexing(receiver), [[0.99, 0.01], [0.01, 0.99]])
    np.testing.assert_array_equal(demultiplexing(Receiver()), np.eye(2))
    field = np.zeros((1, 2, 256), dtype=complex)
    field[0, 0] = 2.0j
    seen = detect(field, receiver, Grid(256, 1.0))
    np.testing.assert_allclose(seen[0, :, 0], [3.96, 0.04])
