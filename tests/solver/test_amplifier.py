"""Optical amplifiers: gain, spontaneous emission and signal-to-noise ratio from textbooks."""

import mpmath
import numpy as np
import pytest

from solver.amplifier import bandpass, emission_w_per_thz, saturated_gain
from solver.detection import Detection
from solver.experiment import Amplifier, Experiment, JsonValue, with_changes
from solver.grid import Grid
from solver.passage import Passage
from solver.relation import input_response
from tests.checks import check

H, C = 6.626_070_15e-34, 299_792_458.0
BOOK = "Agrawal, Fiber-Optic Communication Systems, ch. on optical amplifiers"
WINDOW_PS, SAMPLES = 2048.0, 1024
GRID = Grid(SAMPLES, WINDOW_PS / SAMPLES)


def _experiment(**changes: JsonValue) -> Experiment:
    named = {name.replace("__", "."): value for name, value in changes.items()}
    plain = {
        "ensemble.window_ps": WINDOW_PS,
        "ensemble.samples": SAMPLES,
        "ensemble.max_lag_ps": 100.0,
        "ensemble.distances": 1,
        "ensemble.precision": "double",
        "line.*.gamma_per_w_km": 0.0,
    }
    return with_changes(Experiment(), {**plain, **named})


@pytest.mark.parametrize("input_mw", [1e-4, 0.03, 1.0, 40.0])
def test_saturated_gain(input_mw: float) -> None:
    """ln(G0/G) = (G − 1) P_in/P_s by mpmath, P_s = P_sat (G0 − 2)/(G0 ln 2); half at P_sat."""
    amplifier = Amplifier(noise_figure_db=5.0, gain_db=25.0, saturation_mw=50.0)
    small = mpmath.mpf(10) ** mpmath.mpf("2.5")
    scale = 50 * (small - 2) / (small * mpmath.log(2))
    exact = mpmath.findroot(
        lambda x: x - mpmath.log(small) + (mpmath.e**x - 1) * input_mw / scale,
        (0, mpmath.log(small)),
        solver="anderson",
    )
    found = saturated_gain(amplifier, 1e-3 * input_mw)
    check(
        "amplifier: saturated gain",
        f"{BOOK}; root by mpmath",
        abs(found / float(mpmath.e**exact) - 1.0),
        1e-12,
    )
    half_input_w = 0.05 / (float(small) / 2.0)
    check(
        "amplifier: 3 dB less gain at the output saturation power",
        BOOK,
        abs(saturated_gain(amplifier, half_input_w) * 2.0 / float(small) - 1.0),
        1e-12,
    )


@pytest.mark.parametrize("figure_db", [3.5, 5.0, 8.0])
@pytest.mark.parametrize("gain_db", [10.0, 20.0, 35.0])
def test_spontaneous_emission(figure_db: float, gain_db: float) -> None:
    """P = n_sp hν(G − 1)B in one polarization, F = 2 n_sp (G − 1)/G + 1/G."""
    gain, wavelength_nm = 10 ** (gain_db / 10), 1552.0
    inversion = (10 ** (figure_db / 10) - 1.0 / gain) * gain / (2.0 * (gain - 1.0))
    expected = inversion * H * C / (wavelength_nm * 1e-9) * (gain - 1.0) * 1e12
    amplifier = Amplifier(noise_figure_db=figure_db, gain_db=gain_db)
    found = emission_w_per_thz(amplifier, gain, wavelength_nm)
    check("amplifier: spontaneous emission density", BOOK, abs(found / expected - 1.0), 1e-12)


def test_rule_of_58() -> None:
    """OSNR in 0.1 nm = 58 dB + input power in dBm − noise figure: common practice at 1550 nm.

    Signal in one polarization, noise in both, high gain.
    """
    gain, figure_db, input_dbm = 1e4, 5.0, -20.0
    amplifier = Amplifier(noise_figure_db=figure_db, gain_db=40.0)
    both = 2.0 * emission_w_per_thz(amplifier, gain, 1550.0)
    bandwidth_thz = C * 0.1e-9 / (1550e-9) ** 2 * 1e-12
    signal_w = gain * 1e-3 * 10 ** (input_dbm / 10)
    found = 10.0 * np.log10(signal_w / (both * bandwidth_thz))
    check(
        "amplifier: signal-to-noise ratio in 0.1 nm, high gain",
        "58 dB + P_in − NF at 1550 nm, common practice",
        abs(found - (58.0 + input_dbm - figure_db)),
        0.1,
        "dB",
    )


@pytest.mark.parametrize("source_mw", [1e-4, 3e-3])
def test_booster_sends_signal_and_noise(source_mw: float) -> None:
    """Launched signal over launched noise, as drawn: P_in G T/(2 n_sp hν (G − 1) B_n).

    T is what the Gaussian band-pass lets through of the Gaussian source, B_n its noise
    bandwidth √(π/ln 2)/2 × FWHM. Powers over 256 realizations with their standard error.
    """
    width, band = 24.0, 60.0
    experiment = _experiment(
        source__width_ghz=width,
        source__power_mw=source_mw,
        booster__noise_figure_db=6.0,
        booster__gain_db=30.0,
        booster__saturation_mw=20.0,
        booster__bandpass_ghz=band,
        launch__total_power_mw=100.0,
    )
    gain = saturated_gain(experiment.booster, 1e-3 * source_mw)
    passed = 1.0 / np.sqrt(1.0 + (width / band) ** 2)
    noise_hz = 0.5 * np.sqrt(np.pi / np.log(2.0)) * band * 1e9
    inversion = (10**0.6 * gain - 1.0) / (2.0 * (gain - 1.0))
    noise_w = 2.0 * inversion * H * C / 1552e-9 * (gain - 1.0) * noise_hz
    expected = noise_w / (1e-3 * source_mw * gain * passed)
    response = input_response(experiment, GRID)
    powers = np.sum(np.abs(response) ** 2, axis=(0, 2))
    check(
        "booster: noise over signal at the launch",
        BOOK,
        abs(powers[2:].sum() / powers[:2].sum() / expected - 1.0),
        1e-6,
    )
    field = Passage(experiment, 1).fields(range(256))
    drawn = np.mean(np.abs(field) ** 2, axis=2).sum(axis=1)
    error = drawn.std(ddof=1) / np.sqrt(drawn.size)
    check(
        "booster: drawn power of signal and noise",
        BOOK,
        abs(drawn.mean() - 0.1 * (1.0 + expected)) / error,
        4.0,
        "σ",
    )


PREAMPLIFIER: dict[str, JsonValue] = {
    "preamplifier__noise_figure_db": 5.0,
    "preamplifier__gain_db": 25.0,
    "launch__total_power_mw": 0.02,
}


@pytest.mark.parametrize("beating", ["signal", "both"])
def test_beat_noise_behind_a_preamplifier(beating: str) -> None:
    """Variance of the detected power of a continuous wave after an amplifier.

    Wide band-pass, narrow electrical filter: σ² = 4 P S B_e, the signal's beat with the noise of
    its polarization, S = n_sp hν(G − 1)/G at the input (the noise's beat with itself is a
    hundredth of the error here). Without an electrical filter: σ² = 2 P σ_n² + σ_n⁴, σ_n² = S B_n.
    """
    band = 150.0
    electrical = {"receiver__filter": "gaussian", "receiver__bandwidth_ghz": 8.0}
    experiment = _experiment(
        **PREAMPLIFIER,
        preamplifier__bandpass_ghz=band,
        **(electrical if beating == "signal" else {}),
    )
    gain = 10**2.5
    density = ((10**0.5 * gain - 1.0) / (2.0 * gain)) * H * C / 1552e-9
    power_w = 5e-6
    field = np.zeros((96, 2, SAMPLES), dtype=complex)
    field[:, 0] = np.sqrt(power_w)
    detection = Detection(experiment)
    seen = detection.detected(detection.received(field, range(96)), range(96))
    factor = 0.5 * np.sqrt(np.pi / np.log(2.0))
    if beating == "signal":
        # The optical band-pass shapes the beat: two Gaussians in cascade.
        electrical_hz = 8e9 / np.sqrt(1.0 + (2.0 * 8.0 / band) ** 2)
        expected = 4.0 * power_w * density * factor * electrical_hz
    else:
        noise_w = density * factor * band * 1e9
        expected = 2.0 * power_w * noise_w + noise_w**2
    rows = ((seen[:, 0] - seen[:, 0].mean()) ** 2).mean(axis=1)
    error = rows.std(ddof=1) / np.sqrt(rows.size)
    check(
        f"preamplifier: beat noise, {'electrically filtered' if beating == 'signal' else 'whole'}",
        "Agrawal, Fiber-Optic Communication Systems, ch. on receivers",
        abs(rows.mean() - expected) / error,
        4.0,
        "σ",
    )
    assert bandpass(experiment.preamplifier, GRID).min() < 0.1
