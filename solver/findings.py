"""What is found once of each point of a study: its map, its closed forms, what it kept."""

from dataclasses import dataclass

import numpy as np

from solver.grid import Real


@dataclass(frozen=True)
class Picture:
    """Evolution map of one realization, as 8-bit levels.

    data: uint8, shape (layers, rows, columns): contrast S1/S0 from −1 (0) to 1 (255); the power
    of components 1 and 2 in the fibre, in steps of intensity_scale_w; then, not in a map that
    is watched live, S2/S0 and S3/S0 like the contrast.
    """

    data: np.ndarray
    intensity_scale_w: float


@dataclass(frozen=True)
class LinearRegime:
    """Closed forms with the Kerr term off, on the signed lag axis.

    launched: C12(0) at the launch.
    """

    auto1: Real
    auto2: Real
    sum: Real
    cross: Real
    moment_cross: float
    launched: float


@dataclass(frozen=True)
class Invariants:
    """Largest relative drift of what the line keeps, over the pilot's realizations.

    Energy of component 1, of component 2 and of both, after loss; momentum; Hamiltonian; nan for
    what the line does not keep, and ``note`` says why. :func:`solver.invariants.drifts` says
    what each is held against.
    """

    energy_1: float
    energy_2: float
    energy: float
    momentum: float
    hamiltonian: float
    note: str = ""


@dataclass(frozen=True)
class Scales:
    """Scales of the first span with a Kerr effect, at the power that enters it.

    coherence_time_ps: τc of the source; dispersion_length_km: τc²/|β2|; nonlinear_length_km:
    1/(γ c_self P), P the power of both components; n_squared: the ratio of the two;
    nonlinear_phase_rad: ∫γ c_self P dz over the whole line; healing_time_ps: √(|β2|/(γ c_self P)).
    wall_closed_form_ps: half width 1/κ of a polarization domain wall in normal dispersion, where
    it has a closed form, which is for c_cross = 3 c_self: then it is the healing time at the
    power within a domain, taken to be P; else nan. thermal_walls_per_ns and thermal_wall_ps:
    rate and mean width of walls in light without a Kerr effect whose components are independent,
    of the spectra at the launch and not smoothed, the width for two alike (else nan).
    """

    coherence_time_ps: float
    dispersion_length_km: float
    nonlinear_length_km: float
    n_squared: float
    nonlinear_phase_rad: float
    healing_time_ps: float
    wall_closed_form_ps: float
    thermal_walls_per_ns: float
    thermal_wall_ps: float


SCALE_UNITS = {
    "coherence_time_ps": "ps",
    "dispersion_length_km": "km",
    "nonlinear_length_km": "km",
    "n_squared": "1",
    "nonlinear_phase_rad": "rad",
    "healing_time_ps": "ps",
    "wall_closed_form_ps": "ps",
    "thermal_walls_per_ns": "1/ns",
    "thermal_wall_ps": "ps",
}
"""Units of the fields of :class:`Scales`."""
