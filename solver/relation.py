"""How the two components are made from two independent draws: the input relations, the launch.

Everything linear between the noise and the fibre is one response M of shape
(2 components, 2 draws, samples): component j is Σ_d M_jd n_d. The random fields and the
closed forms of :mod:`solver.theory` both start from it.
"""

import numpy as np

from solver.experiment import Experiment, Launch, Relation
from solver.grid import Complex, Grid
from solver.source import power_spectrum
from solver.units import ratio_from_db


def relation_response(relation: Relation, grid: Grid) -> Complex:
    """Transfer functions of the input relation; shape (2 components, 2 draws, samples)."""
    response = np.zeros((2, 2, grid.samples), dtype=np.complex128)
    response[0, 0] = 1.0
    match relation.kind:
        case "independent":
            response[1, 1] = 1.0
        case "derivative":
            response[1, 0] = 1j * grid.omega
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


def launch_response(response: Complex, launch: Launch, grid: Grid) -> Complex:
    """Apply launch powers, skew and crosstalk to a response.

    Powers are those of the ensemble average. Crosstalk is a rotation of the launch axes: the
    stated fraction of each component's power ends in the other one, coherently.
    """
    shares = np.array([launch.share_1, 1.0 - launch.share_1])
    powers_w = 1e-3 * launch.total_power_mw * shares
    present = np.sum(np.abs(response) ** 2, axis=(1, 2))
    launched = response * np.sqrt(powers_w / present)[:, None, None]
    launched[1] *= np.exp(-1j * grid.omega * launch.skew_ps)
    if launch.crosstalk_db is not None:
        leak = ratio_from_db(launch.crosstalk_db)
        c, s = np.sqrt(1.0 - leak), np.sqrt(leak)
        launched = np.stack([c * launched[0] + s * launched[1], c * launched[1] - s * launched[0]])
    return np.asarray(launched)


def input_response(experiment: Experiment, grid: Grid) -> Complex:
    """Response of source, relation and launch together, √W; shape (2, 2, samples)."""
    amplitude = np.sqrt(power_spectrum(experiment.source, grid))
    related = relation_response(experiment.relation, grid) * amplitude
    return launch_response(related, experiment.launch, grid)
