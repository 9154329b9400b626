"""Scales of an experiment: what its lengths, times and powers are to be held against."""

import math

import numpy as np

from solver.experiment import Experiment
from solver.findings import Scales
from solver.grid import Grid, Real
from solver.relation import input_response
from solver.source import power_spectrum
from solver.thermal import wall_width_ps, walls_per_ps
from solver.units import attenuation_per_km, effective_length_km, ratio_from_db


def scales(experiment: Experiment) -> Scales:
    """Scales of an experiment (Agrawal, Nonlinear Fiber Optics, ch. 3, with τc as width).

    Infinite lengths where there is no dispersion or no Kerr effect; a gain within a span enters
    the phase as negative loss.
    """
    grid = Grid(experiment.ensemble.samples, experiment.ensemble.time_step_ps)
    spectrum = power_spectrum(experiment.source, grid)
    coherence_ps = grid.window_ps * float(np.sum(spectrum**2))
    powers_w, rms = _at_launch(experiment, grid)
    power_w = float(powers_w.sum())
    phase = 0.0
    found: tuple[float, float, float] | None = None
    for span in experiment.line:
        own, other = (span.gamma_per_w_km * factor for factor in span.kerr_coefficients())
        beta2 = span.beta2(experiment.source.wavelength_nm)
        if own * power_w > 0.0 and found is None:
            found = own * power_w, beta2, other / own
        net_db = span.loss_db_per_km - span.gain_db_per_km
        phase += own * power_w * effective_length_km(span.length_km, net_db)
        power_w *= math.exp(-attenuation_per_km(net_db) * span.length_km)
        power_w *= ratio_from_db(-span.joint_loss_db)
    beta2_first = experiment.line[0].beta2(experiment.source.wavelength_nm)
    rate, beta2, ratio = found or (0.0, beta2_first, 0.0)
    dispersion_km = coherence_ps**2 / abs(beta2) if beta2 else math.inf
    nonlinear_km = 1.0 / rate if rate else math.inf
    healing_ps = math.sqrt(abs(beta2) / rate) if rate else math.inf
    closed = beta2 > 0.0 and rate > 0.0 and math.isclose(ratio, 3.0, rel_tol=1e-6)
    alike = bool(np.isclose(powers_w[0], powers_w[1], rtol=1e-3)) and bool(
        np.isclose(rms[0], rms[1], rtol=1e-3)
    )
    return Scales(
        coherence_time_ps=coherence_ps,
        dispersion_length_km=dispersion_km,
        nonlinear_length_km=nonlinear_km,
        n_squared=dispersion_km / nonlinear_km if math.isfinite(dispersion_km) else math.inf,
        nonlinear_phase_rad=phase,
        healing_time_ps=healing_ps,
        wall_closed_form_ps=healing_ps if closed else math.nan,
        thermal_walls_per_ns=1e3 * walls_per_ps(powers_w, rms),
        thermal_wall_ps=wall_width_ps(float(rms[0])) if alike and rms[0] > 0.0 else math.nan,
    )


def _at_launch(experiment: Experiment, grid: Grid) -> tuple[Real, Real]:
    """Mean powers, W, and rms angular widths, rad/ps, of the two components at the launch."""
    density = np.sum(np.abs(input_response(experiment, grid)) ** 2, axis=1)
    powers_w = density.sum(axis=1)
    shares = density / np.maximum(powers_w, np.finfo(float).tiny)[:, None]
    mean = (shares * grid.omega).sum(axis=1, keepdims=True)
    return powers_w, np.sqrt((shares * (grid.omega - mean) ** 2).sum(axis=1))
