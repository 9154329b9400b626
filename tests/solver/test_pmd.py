"""Polarization-mode dispersion: unitary sections, the mean delay and its distribution."""

import numpy as np
from scipy import stats

from solver.experiment import Experiment, Span, with_changes
from solver.fibre import linear_response, sections
from solver.grid import Grid
from solver.propagation import propagate
from solver.theory import linear_correlations
from tests import reference

GRID = Grid(16, 200.0)
SPAN = Span(length_km=9.0, beta2_ps2_per_km=17.0, pmd_ps_per_sqrt_km=0.5)


def _matrices(span: Span, seed: int, grid: Grid = GRID) -> np.ndarray:
    """Jones matrices of a line at every frequency; shape (samples, 2, 2)."""
    unit = np.broadcast_to(np.eye(2, dtype=complex)[:, :, None], (2, 2, grid.samples))
    return np.moveaxis(linear_response(sections([span], grid, 1550.0, seed), unit), 2, 0)


def _delay(matrices: np.ndarray) -> float:
    """Differential group delay at the carrier, ps: eigenphases of U(ω + dω)U†(ω)."""
    turned = np.linalg.eigvals(matrices[1] @ matrices[0].conj().T)
    return float(abs(np.angle(turned[0] / turned[1])) / GRID.omega[1])


def test_jones_matrices_are_unitary() -> None:
    """No random section makes or loses light, at any frequency."""
    for seed in range(5):
        for matrix in _matrices(SPAN, seed):
            np.testing.assert_allclose(matrix @ matrix.conj().T, np.eye(2), atol=1e-13)


def test_mean_and_distribution_of_the_delay() -> None:
    """Mean = coefficient × √length, Maxwellian.

    Foschini and Poole, J. Lightwave Technol. 9, 1439 (1991). A Maxwellian of mean m has the
    standard deviation m√(3π/8 − 1).
    """
    fibres = 400
    delays = np.array([_delay(_matrices(SPAN, seed)) for seed in range(fibres)])
    mean = 0.5 * np.sqrt(9.0)
    error = mean * np.sqrt(3 * np.pi / 8 - 1) / np.sqrt(fibres)
    assert abs(delays.mean() - mean) < 3.0 * error
    scale = mean / np.sqrt(8 / np.pi)
    assert stats.kstest(delays, stats.maxwell(scale=scale).cdf).pvalue > 0.01


def test_a_fibre_is_fixed_by_its_seed() -> None:
    """Same seed, same fibre, and two spans of one line are not alike."""
    np.testing.assert_array_equal(_matrices(SPAN, 3), _matrices(SPAN, 3))
    fine = Grid(16, 1.0)
    assert np.abs(_matrices(SPAN, 3, fine) - _matrices(SPAN, 4, fine)).max() > 0.1
    both = sections([SPAN, SPAN], GRID, 1550.0, 3)
    half = len(both) // 2
    assert np.abs(both[0].axes - both[half].axes).max() > 1e-3


def test_propagation_is_the_matrices() -> None:
    """The march with the Kerr term off equals the product of the sections."""
    field = reference.stirred_light(4, 1, 512, 1.0, 0.02, 0.1)
    out = propagate(field, time_step_ps=1.0, line=[SPAN], wavelength_nm=1550.0, fibre_seed=7)
    matrices = _matrices(SPAN, 7, Grid(512, 1.0))
    expected = np.fft.ifft(np.einsum("fjk,kf->jf", matrices, np.fft.fft(field[0])))
    assert reference.relative_l2(out.field[0], expected) < 1e-12


def test_theory_sees_the_fibre_of_the_ensemble() -> None:
    """The closed form is of the seed's own fibre, so it changes with the seed."""
    lossy = with_changes(
        Experiment(line=(SPAN,)),
        {"relation.kind": "identical", "line.*.pmd_ps_per_sqrt_km": 5.0},
    )
    grid = Grid(1024, 8.0)
    one, other = (
        linear_correlations(with_changes(lossy, {"ensemble.seed": seed}), grid).cross[0]
        for seed in (1, 2)
    )
    assert abs(one - other) > 0.01


def test_kerr_and_random_sections_together() -> None:
    """The march turns the axes where it should: section by section with DOP853.

    Section delays are recomputed here from the Maxwellian limit, the axes are the solver's.
    """
    span = Span(
        length_km=3.2,
        beta2_ps2_per_km=17.0,
        loss_db_per_km=0.2,
        gamma_per_w_km=2.0,
        pmd_ps_per_sqrt_km=2.0,
    )
    field = reference.stirred_light(4, 1, 256, 1.0, 0.02, 0.05)
    made = sections([span], Grid(256, 1.0), 1550.0, 7)
    length = 3.2 / len(made)
    delay = 2.0 * np.sqrt(3.2) / np.sqrt(8.0 * len(made) / (3.0 * np.pi)) / length
    piece = reference.Glass(length, 17.0, 0.0, 0.02 * np.log(10.0), 2.0, delay=delay)
    exact = field[0]
    for section in made:
        assert section.axes is not None
        turned = reference.integrate(section.axes @ exact, 1.0, [piece], rtol=1e-9)
        exact = section.axes.conj().T @ turned
    out = propagate(
        field,
        time_step_ps=1.0,
        line=[span],
        tolerance=1e-7,
        wavelength_nm=1550.0,
        fibre_seed=7,
        snapshots_km=[1.65, 3.2],
    )
    assert out.outcome.kind == "completed"
    assert out.snapshots is not None
    assert reference.relative_l2(out.field[0], exact) < 2e-7
    cut = span.model_copy(update={"pmd_ps_per_sqrt_km": 0.0})
    plain = propagate(field, time_step_ps=1.0, line=[cut], tolerance=1e-7)
    assert reference.relative_l2(plain.field[0], exact) > 0.05
