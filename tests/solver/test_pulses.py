"""Closed forms of single pulses: dispersion, self-phase modulation, group delay, units."""

import numpy as np
import pytest

from solver.experiment import Span
from solver.propagation import propagate
from solver.units import attenuation_per_km, beta2_from_dispersion, effective_length_km
from tests import reference
from tests.checks import check

TIME_STEP_PS = 1.0
TIME = reference.time_axis(1024, TIME_STEP_PS)


def _pulse(width_ps: float, powers_w: tuple[float, float], chirp: float = 0.0) -> np.ndarray:
    """Gaussian pulses exp(−(1 + iC)t²/2T²) in both components; shape (1, 2, samples)."""
    shape = np.exp(-(1.0 + 1j * chirp) * TIME**2 / (2.0 * width_ps**2))
    return np.sqrt(np.array(powers_w))[None, :, None] * shape


@pytest.mark.parametrize(
    ("dispersion", "wavelength", "beta2"),
    [(17.0, 1550.0, -21.7), (-13.0, 1552.0, 16.6), (16.0, 1550.0, -20.4)],
)
def test_dispersion_conversion(dispersion: float, wavelength: float, beta2: float) -> None:
    """β2 = −Dλ²/2πc; the first pair are the typical values of ITU-T G.652 fibre at 1550 nm."""
    check(
        "β2 from D at 1550 nm",
        "ITU-T G.652 typical values, from memory; −Dλ²/2πc",
        abs(beta2_from_dispersion(dispersion, wavelength) - beta2),
        0.05,
        "ps²/km",
    )


def test_attenuation() -> None:
    """3.0103 dB halve the power; the effective length tends to 1/α and to the length."""
    alpha = attenuation_per_km(0.2)
    assert np.exp(-alpha * 15.0514998) == pytest.approx(0.5, rel=1e-8)
    assert effective_length_km(1e5, 0.2) == pytest.approx(1.0 / alpha)
    assert effective_length_km(3.0, 0.0) == 3.0


@pytest.mark.parametrize("chirp", [0.0, 1.5, -1.5])
@pytest.mark.parametrize("dispersion", [17.0, -17.0])
def test_gaussian_pulse_broadens(dispersion: float, chirp: float) -> None:
    """T/T0 = √((1 + C s z/L_D)² + (z/L_D)²), s the sign of β2; √(1 + (z/L_D)²) without chirp.

    Agrawal, Nonlinear Fiber Optics, ch. 3. The chirp fixes the sign of β2 as well: a field
    e^{−iCt²/2T²} is compressed at first by one sign and not by the other.
    """
    width = 25.0
    span = Span(length_km=30.0, dispersion_ps_per_nm_km=dispersion)
    beta2 = span.beta2(1550.0)
    out = propagate(
        _pulse(width, (1.0, 0.5), chirp),
        time_step_ps=TIME_STEP_PS,
        line=[span],
        tolerance=1e-8,
        wavelength_nm=1550.0,
        snapshots_km=[5.0, 10.0, 30.0],
    )
    assert out.outcome.kind == "completed"
    assert out.snapshots is not None
    for z, field in zip(out.z_km, out.snapshots, strict=True):
        ratio = z * beta2 / width**2
        expected = np.sqrt((1.0 + chirp * ratio) ** 2 + ratio**2)
        for component in field[0]:
            found = reference.rms_width(np.abs(component) ** 2, TIME) / (width / np.sqrt(2.0))
            check(
                "Gaussian pulse, chirped or not, dispersion alone: rms width",
                "Agrawal, Nonlinear Fiber Optics, ch. 3",
                abs(found / expected - 1.0),
                1e-7,
            )


@pytest.mark.parametrize("loss", [0.0, 0.3])
@pytest.mark.parametrize(
    ("coupling", "own", "other"),
    [
        ("manakov", 8 / 9, 8 / 9),
        ("linear_birefringent", 1.0, 2 / 3),
        ("isotropic_circular", 2 / 3, 4 / 3),
        ("uncoupled", 8 / 9, 0.0),
    ],
)
def test_kerr_phase(coupling: str, own: float, other: float, loss: float) -> None:
    """Without dispersion the phase is γ(c_self P_j + c_cross P_k) L_eff at every instant.

    Agrawal, Nonlinear Fiber Optics, ch. 4 and 7 (self- and cross-phase modulation).
    """
    length, gamma, powers = 20.0, 2.0, (0.3, 0.1)
    field = _pulse(40.0, powers)
    span = Span(
        length_km=length,
        beta2_ps2_per_km=0.0,
        loss_db_per_km=loss,
        gamma_per_w_km=gamma,
        coupling=coupling,
    )
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[span], tolerance=1e-9)
    assert out.outcome.kind == "completed"
    alpha = loss * np.log(10.0) / 10.0
    effective = -np.expm1(-alpha * length) / alpha if alpha else length
    power = np.abs(field) ** 2
    phase = gamma * effective * (own * power + other * power[:, ::-1])
    exact = field * np.exp(-alpha * length / 2 + 1j * phase)
    check(
        "pulses under self- and cross-phase modulation, every coupling, with loss: field",
        "Agrawal, Nonlinear Fiber Optics, ch. 4 and 7",
        reference.relative_l2(out.field, exact),
        1e-9,
    )
    peak = np.angle(out.field[0, :, TIME.size // 2] / field[0, :, TIME.size // 2])
    turns = np.exp(
        1j * (peak - gamma * effective * (own * np.array(powers) + other * np.array(powers[::-1])))
    )
    np.testing.assert_allclose(turns, 1.0, atol=1e-8)


@pytest.mark.parametrize("phase", [1.0, 4.5, 9.0])
def test_spectrum_under_self_phase_modulation(phase: float) -> None:
    """rms width of a Gaussian pulse's spectrum grows by √(1 + (4/3√3) φ²).

    Pinault and Potasek, J. Opt. Soc. Am. B 2, 1318 (1985); Agrawal, ch. 4.
    """
    gamma, length = 2.0, 10.0
    power = phase / (gamma * 8 / 9 * length)
    field = _pulse(40.0, (power, 0.0))
    span = Span(length_km=length, beta2_ps2_per_km=0.0, gamma_per_w_km=gamma)
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[span], tolerance=1e-6)
    omega = reference.angular_frequency(TIME.size, TIME_STEP_PS)
    before, after = (
        reference.rms_width(np.abs(np.fft.fft(x[0, 0])) ** 2, omega) for x in (field, out.field)
    )
    check(
        "Gaussian pulse under self-phase modulation: rms width of the spectrum",
        "Pinault and Potasek, J. Opt. Soc. Am. B 2, 1318 (1985)",
        abs(after / before / np.sqrt(1 + 4 / (3 * np.sqrt(3)) * phase**2) - 1.0),
        1e-8,
    )


def test_component_1_falls_behind() -> None:
    """With δ > 0 component 1 arrives δL later than component 2."""
    span = Span(length_km=10.0, beta2_ps2_per_km=0.0, delay_ps_per_km=3.0)
    out = propagate(_pulse(30.0, (1.0, 1.0)), time_step_ps=TIME_STEP_PS, line=[span])
    first, second = (np.sum(TIME * np.abs(x) ** 2) / np.sum(np.abs(x) ** 2) for x in out.field[0])
    assert first == pytest.approx(15.0, abs=1e-9)
    assert second == pytest.approx(-15.0, abs=1e-9)


def test_third_order_dispersion_delays_the_spectrum_edges() -> None:
    """Group delay of a quasi-monochromatic pulse at offset Ω is −β2Ω z + β3Ω²z/2 here.

    The carrier is e^{−iω0t}, so a baseband +Ω is an optical frequency below the carrier.
    """
    omega = 2.0 * np.pi * 20 / 1024.0
    field = _pulse(60.0, (1.0, 1.0)) * np.exp(1j * omega * TIME)
    span = Span(length_km=40.0, beta2_ps2_per_km=10.0, beta3_ps3_per_km=80.0)
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[span], tolerance=1e-8)
    power = np.abs(out.field[0, 0]) ** 2
    spread = np.abs(np.fft.fft(field[0, 0])) ** 2
    grid = reference.angular_frequency(1024, TIME_STEP_PS)
    delay = np.sum((-10.0 * grid + 40.0 * grid**2) * spread) / np.sum(spread) * 40.0
    check(
        "pulse off the carrier, β2 and β3: group delay",
        "dβ/dω; Agrawal, Nonlinear Fiber Optics, ch. 1",
        abs(np.sum(TIME * power) / np.sum(power) - delay),
        1e-6,
        "ps",
    )
