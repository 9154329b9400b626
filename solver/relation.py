"""How the two components are made from independent draws: input relations, shaper, launch.

Everything linear between the noise and the fibre is one response M of shape
(2 components, draws, samples): component j is Σ_d M_jd n_d. Two draws are the source's; with a
booster two more are its spontaneous emission. The random fields and the closed forms of
:mod:`solver.theory` both start from it.
"""

import numpy as np

from solver.amplifier import bandpass, emission_w_per_thz, saturated_gain
from solver.experiment import Amplifier, Experiment, Launch, Relation, Shaper
from solver.grid import Complex, Grid, Real
from solver.source import power_spectrum
from solver.units import ratio_from_db

LIT = 1e-4
"""Share of the highest spectral density above which the source is taken to be lit."""


def relation_response(relation: Relation, grid: Grid) -> Complex:
    """Transfer functions of the input relation; shape (2 components, 2 draws, samples)."""
    response = np.zeros((2, 2, grid.samples), dtype=np.complex128)
    response[0, 0] = 1.0
    match relation.kind:
        case "independent":
            response[1, 1] = 1.0
        case "derivative":
            end = np.inf if relation.range_ghz is None else 2e-3 * np.pi * relation.range_ghz
            response[1, 0] = 1j * np.clip(grid.omega, -end, end)
        case "hilbert":
            passed = np.abs(grid.frequency_thz) >= relation.notch_ghz / 2e3
            response[1, 0] = -1j * np.sign(grid.frequency_thz) * passed
        case "delayed":
            response[1, 0] = np.exp(-1j * grid.omega * relation.delay_ps)
        case "partial":
            response[1, 0] = np.sqrt(relation.correlation)
            response[1, 1] = np.sqrt(1.0 - relation.correlation)
        case "identical":
            response[1, 0] = 1.0
    return response


def shaped_response(response: Complex, shaper: Shaper, lit: Real, grid: Grid) -> Complex:
    """What a shaper makes of the responses asked of it, those of component 2.

    Its transmission does not fall below the extinction, held against the highest where the
    source is lit (``lit``, bool); then the amplitude response is smoothed by the resolution.
    """
    made = response.copy()
    for target in made[1]:
        if not target.any():
            continue
        if shaper.extinction_db is not None:
            floor = np.sqrt(ratio_from_db(shaper.extinction_db)) * np.abs(target[lit]).max()
            target[:] = np.maximum(np.abs(target), floor) * _phase(target)
        if shaper.resolution_ghz:
            # Smoothing over frequency is a window over time.
            spread_thz = 1e-3 * shaper.resolution_ghz / np.sqrt(8.0 * np.log(2.0))
            time_ps = np.fft.fftfreq(grid.samples, 1.0 / grid.window_ps)
            window = np.exp(-0.5 * (2.0 * np.pi * spread_thz * time_ps) ** 2)
            target[:] = np.fft.fft(np.fft.ifft(target) * window)
    return made


def _phase(target: Complex) -> Complex:
    """Phase factors of a response, FFT order; where nothing passes that of the nearest light.

    Between two equally near ones, as at the carrier, the one above is taken.
    """
    ascending = np.fft.fftshift(target)
    passed = np.flatnonzero(ascending)
    here = np.arange(target.size)
    above = passed[np.minimum(np.searchsorted(passed, here), passed.size - 1)]
    below = passed[np.maximum(np.searchsorted(passed, here, side="right") - 1, 0)]
    nearest = ascending[np.where(np.abs(above - here) <= np.abs(here - below), above, below)]
    return np.asarray(np.fft.ifftshift(nearest / np.abs(nearest)))


def _transmission(response: Complex, lit: Real, spectrum: Real) -> float:
    """Mean power transmission of both arms, each held against the highest where light is."""
    passed = 0.0
    for arm in np.sum(np.abs(response) ** 2, axis=1):
        passed += 0.5 * float((arm * spectrum).sum() / max(arm[lit].max(), 1e-300))
    return passed


def launch_response(response: Complex, launch: Launch, grid: Grid) -> Complex:
    """Apply launch powers, skew, polarization-dependent loss and crosstalk to a response.

    Powers are those of the ensemble average. Crosstalk is a rotation of the launch axes: the
    stated fraction of each component's power ends in the other one, coherently.
    """
    shares = np.array([launch.share_1, 1.0 - launch.share_1])
    powers_w = 1e-3 * launch.total_power_mw * shares
    # The source's two draws carry the stated power; what an amplifier adds comes on top.
    present = np.sum(np.abs(response[:, :2]) ** 2, axis=(1, 2))
    launched = response * np.sqrt(powers_w / present)[:, None, None]
    launched[1] *= np.exp(-1j * grid.omega * launch.skew_ps)
    launched[1] *= np.sqrt(ratio_from_db(-launch.pdl_db))
    if launch.crosstalk_db is not None:
        leak = ratio_from_db(launch.crosstalk_db)
        c, s = np.sqrt(1.0 - leak), np.sqrt(leak)
        launched = np.stack([c * launched[0] + s * launched[1], c * launched[1] - s * launched[0]])
    return np.asarray(launched)


def input_response(experiment: Experiment, grid: Grid) -> Complex:
    """Response of source, relation, shaper, booster and launch together, √W.

    Shape (2, 2, samples), or (2, 4, samples) with a booster.
    """
    source, shaper = experiment.source, experiment.shaper
    spectrum = power_spectrum(source, grid)
    lit = spectrum > LIT * spectrum.max()
    wanted = relation_response(experiment.relation, grid)
    related = shaped_response(wanted, shaper, lit, grid)
    response = related * np.sqrt(spectrum)
    if experiment.booster.noise_figure_db is not None:
        input_w = (
            1e-3
            * source.power_mw
            * ratio_from_db(-shaper.insertion_loss_db)
            * _transmission(related, lit, spectrum)
        )
        response = _boosted(response, experiment.booster, input_w, source.wavelength_nm, grid)
    return launch_response(response, experiment.launch, grid)


def _boosted(
    response: Complex, booster: Amplifier, input_w: float, wavelength_nm: float, grid: Grid
) -> Complex:
    """Each component at half the power, its spontaneous emission added as a draw of its own."""
    gain = saturated_gain(booster, input_w)
    emitted_w = emission_w_per_thz(booster, gain, wavelength_nm) / grid.window_ps
    present = np.sum(np.abs(response) ** 2, axis=(1, 2))
    whole = np.zeros((2, 4, grid.samples), dtype=np.complex128)
    whole[:, :2] = response * np.sqrt(0.5 * gain * input_w / present)[:, None, None]
    whole[0, 2] = whole[1, 3] = np.sqrt(emitted_w)
    return np.asarray(whole * bandpass(booster, grid))
