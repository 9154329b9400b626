"""Optical amplifiers: gain that saturates, spontaneous emission, the band-pass after them."""

import numpy as np
from scipy.optimize import brentq

from solver.grid import Grid, Real
from solver.sending import Amplifier
from solver.units import LIGHT_SPEED_NM_PER_PS, ratio_from_db

PLANCK_J_S = 6.626_070_15e-34
"""Planck constant (exact, SI)."""


def saturated_gain(amplifier: Amplifier, input_w: float) -> float:
    """Power gain for a mean input power.

    G = G0 exp(−(G − 1)/G · P_out/P_s), with P_s such that the output saturation power takes
    3 dB off: P_out,sat = G0 ln2/(G0 − 2) · P_s (Agrawal, Fiber-Optic Communication Systems,
    ch. on optical amplifiers). Without a saturation power the gain is that of small signals.
    """
    small = ratio_from_db(amplifier.gain_db)
    if amplifier.saturation_mw is None:
        return small
    scale_w = 1e-3 * amplifier.saturation_mw * (small - 2.0) / (small * np.log(2.0))

    def excess(log_gain: float) -> float:
        gain = np.exp(log_gain)
        return float(log_gain - np.log(small) + (gain - 1.0) * input_w / scale_w)

    return float(np.exp(brentq(excess, 0.0, np.log(small), xtol=1e-14)))


def emission_w_per_thz(amplifier: Amplifier, gain: float, wavelength_nm: float) -> float:
    """Spontaneous emission in one polarization at the output, W/THz; 0 without an amplifier.

    n_sp hν (G − 1), with the noise figure F = 2 n_sp (G − 1)/G + 1/G (Desurvire, Erbium-Doped
    Fiber Amplifiers; Agrawal, Fiber-Optic Communication Systems).
    """
    if amplifier.noise_figure_db is None:
        return 0.0
    frequency_thz = LIGHT_SPEED_NM_PER_PS / wavelength_nm
    inversion = (ratio_from_db(amplifier.noise_figure_db) * gain - 1.0) / (2.0 * (gain - 1.0))
    return float(inversion * PLANCK_J_S * frequency_thz * 1e24 * (gain - 1.0))


def bandpass(amplifier: Amplifier, grid: Grid) -> Real:
    """Amplitude transmission of the optical band-pass, FFT order, shape (samples,)."""
    if amplifier.bandpass_ghz is None:
        return np.ones(grid.samples)
    x = 2e3 * grid.frequency_thz / amplifier.bandpass_ghz
    return np.asarray(np.exp(-0.5 * np.log(2.0) * x**2))
