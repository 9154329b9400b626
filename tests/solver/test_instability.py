"""Modulation instability of two orthogonal continuous waves, measured and from the formula.

Sidebands are launched one at a time beside both carriers, and what a fibre makes of them is
measured as a 4 × 4 matrix at each frequency; its eigenvalues are the growth of the modes, found
without any theory of them.
"""

import numpy as np
import pytest

from solver.experiment import Span
from solver.propagation import propagate
from tests.checks import check

SAMPLES, TIME_STEP_PS = 1024, 1.0
BINS = np.arange(1, 72, 2)
"""Odd ones only: sums and differences of two, of the second order, fall between them."""
OMEGA = 2.0 * np.pi * BINS / (SAMPLES * TIME_STEP_PS)
SIDEBAND = 1e-6
LENGTH_KM, BETA2, GAMMA = 6.0, 20.0, 2.0
POWER_W = 0.2
SOURCE = "Agrawal, Phys. Rev. Lett. 59, 880 (1987); Nonlinear Fiber Optics, ch. 6 and 7"


def _span(own: float, other: float, delay: float = 0.0) -> Span:
    return Span(
        length_km=LENGTH_KM,
        beta2_ps2_per_km=BETA2,
        gamma_per_w_km=GAMMA,
        coupling="custom",
        self_coefficient=own,
        cross_coefficient=other,
        delay_ps_per_km=delay,
    )


def _measured(span: Span, powers_w: tuple[float, float]) -> np.ndarray:
    """Gain 1/km of the fastest-growing sideband amplitude at every frequency."""
    carriers = np.sqrt(np.array(powers_w)) + 0j
    size = SIDEBAND * carriers.max()
    spectrum = np.zeros((4, 2, SAMPLES), dtype=complex)
    spectrum[:, :, 0] = carriers
    for component in range(2):
        spectrum[2 * component, component, BINS] = size
        spectrum[2 * component + 1, component, -BINS] = size
    field = np.fft.ifft(spectrum, norm="forward")
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[span], tolerance=1e-10)
    assert out.outcome.kind == "completed"
    seen = np.fft.fft(out.field, norm="forward")
    phase = np.where(carriers == 0.0, 1.0, seen[:, :, 0] / np.maximum(np.abs(seen[:, :, 0]), 1e-30))
    seen = seen / phase[:, :, None]
    matrices = np.empty((BINS.size, 4, 4), dtype=complex)
    for component in range(2):
        matrices[:, 2 * component] = seen[:, component, BINS].T / size
        matrices[:, 2 * component + 1] = seen[:, component, -BINS].conj().T / size
    return np.log(np.abs(np.linalg.eigvals(matrices)).max(axis=1)) / LENGTH_KM


def _formula(span: Span, powers_w: tuple[float, float]) -> np.ndarray:
    """Largest growth 1/km of an amplitude e^{iKz}: −Im K of the dispersion relation

    [(K − δΩ/2)² − f1][(K + δΩ/2)² − f2] = C², f_j = (β2Ω²/2)(β2Ω²/2 + 2γc_self P_j),
    C = β2Ω² γ c_cross √(P1 P2).
    """
    own, other = span.kerr_coefficients()
    gains = []
    for omega in OMEGA:
        half = BETA2 * omega**2 / 2
        f1, f2 = (half * (half + 2.0 * GAMMA * own * p) for p in powers_w)
        c = 2.0 * half * GAMMA * other * np.sqrt(powers_w[0] * powers_w[1])
        d = span.delay_ps_per_km * omega / 2
        quartic = np.polymul([1.0, -2.0 * d, d**2 - f1], [1.0, 2.0 * d, d**2 - f2])
        quartic[-1] -= c**2
        gains.append(np.abs(np.roots(quartic).imag).max())
    return np.array(gains)


@pytest.mark.parametrize(
    ("own", "other", "delay"),
    [(1.0, 2 / 3, 5.0), (8 / 9, 8 / 9, 5.0), (2 / 3, 4 / 3, 0.0), (2 / 3, 4 / 3, 2.0)],
    ids=["ratio 2/3", "ratio 1", "ratio 2", "ratio 2 with walk-off"],
)
@pytest.mark.parametrize("share", [0.5, 0.3])
def test_gain_against_frequency(own: float, other: float, delay: float, share: float) -> None:
    """Orthogonal waves in normal dispersion; ratios of 2/3 and 1 need walk-off to be unstable."""
    span = _span(own, other, delay)
    powers = (share * POWER_W, (1.0 - share) * POWER_W)
    found, expected = _measured(span, powers), _formula(span, powers)
    assert expected.max() * LENGTH_KM > 0.25
    assert expected.min() < 1e-9
    name = f"modulation instability, cross/self {other / own:.2g}: gain against frequency"
    # Where two modes meet at an end of the band the root of an error is seen.
    inside = (expected > 0.1 * expected.max()) | (expected == 0.0)
    check(name, SOURCE, np.abs(found - expected)[inside].max() / expected.max(), 1e-6)


def test_gain_and_cut_off_without_walk_off() -> None:
    """At cross/self = 2 and equal powers P each, growth up to Ω² = 4γP(c_cross − c_self)/β2.

    The amplitude grows at most by γP(c_cross − c_self), at half the square of the cut-off.
    """
    span = _span(2 / 3, 4 / 3)
    power = POWER_W / 2
    found = _measured(span, (power, power))
    cut_off = np.sqrt(4.0 * GAMMA * power * (2 / 3) / BETA2)
    ratio = OMEGA / cut_off
    assert 5 < np.count_nonzero(ratio < 1.0) < BINS.size - 5
    strength = GAMMA * power * 2 / 3
    assert np.all(found[ratio < 0.98] > 0.05 * strength)
    assert found.max() == pytest.approx(strength, rel=0.02)
    check(
        "modulation instability, cross/self 2: none above the cut-off, of the peak gain",
        SOURCE,
        found[ratio > 1.02].max() / strength,
        1e-6,
    )


@pytest.mark.parametrize(
    ("own", "other", "powers_w"),
    [
        (1.0, 2 / 3, (0.1, 0.1)),
        (8 / 9, 8 / 9, (0.1, 0.1)),
        (8 / 9, 8 / 9, (0.14, 0.06)),
        (2 / 3, 4 / 3, (0.2, 0.0)),
        (8 / 9, 0.0, (0.1, 0.1)),
    ],
    ids=["ratio 2/3", "ratio 1", "ratio 1 uneven", "scalar", "uncoupled"],
)
def test_none_where_theory_says_so(own: float, other: float, powers_w: tuple[float, float]) -> None:
    """Normal dispersion without walk-off is stable for one wave and for cross ≤ self."""
    span = _span(own, other)
    assert _formula(span, powers_w).max() < 1e-5
    check(
        "modulation instability, normal dispersion: none for cross/self ≤ 1 or one wave, of γP",
        SOURCE,
        np.abs(_measured(span, powers_w)).max() / (GAMMA * POWER_W),
        1e-6,
    )


def test_one_wave_in_anomalous_dispersion_is_unstable() -> None:
    """The control: Ω√(Ω_c² − Ω²)|β2|/2 with Ω_c² = 4γP/|β2| (same textbook, ch. 5)."""
    span = _span(1.0, 0.0).model_copy(update={"beta2_ps2_per_km": -BETA2})
    found = _measured(span, (POWER_W / 2, 0.0))
    critical = 4.0 * GAMMA * POWER_W / 2 / BETA2
    expected = 0.5 * BETA2 * OMEGA * np.sqrt(np.maximum(critical - OMEGA**2, 0.0))
    check(
        "modulation instability, one wave, anomalous dispersion: gain against frequency",
        "Agrawal, Nonlinear Fiber Optics, ch. 5",
        np.abs(found - expected).max() / expected.max(),
        1e-6,
    )
