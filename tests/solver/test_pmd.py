"""Polarization-mode dispersion: unitary sections, the mean delay and its distribution."""

import numpy as np
import pytest
from scipy import stats

from solver.ensemble import Bench
from solver.experiment import Experiment, Span, with_changes
from solver.fibre import PMD_SECTIONS, drawn_axes, linear_response, sections
from solver.grid import Grid
from solver.passage import Passage
from solver.propagation import propagate
from solver.relation import input_response
from solver.source import draw, power_spectrum, synthesize
from solver.statistics import Blocks, central
from solver.task import Leg
from solver.theory import linear_correlations
from tests import reference
from tests.checks import check

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
    _check_delays(delays, 0.5 * np.sqrt(9.0), "one fibre for each seed")


def _check_delays(delays: np.ndarray, mean: float, fibres: str) -> None:
    """Mean and distribution of differential group delays, ps."""
    source = "Foschini and Poole, J. Lightwave Technol. 9, 1439 (1991)"
    error = mean * np.sqrt(3 * np.pi / 8 - 1) / np.sqrt(delays.size)
    check(
        f"PMD, {fibres}: mean differential delay",
        source,
        abs(delays.mean() - mean) / error,
        3.0,
        "σ",
    )
    scale = mean / np.sqrt(8 / np.pi)
    distance = stats.kstest(delays, stats.maxwell(scale=scale).cdf).statistic
    check(
        f"PMD, {fibres}: distance from a Maxwellian, of the 1 % limit of Kolmogorov and Smirnov",
        source,
        distance * np.sqrt(delays.size) / 1.63,
        1.0,
    )


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


def _drawn(**changes: object) -> Experiment:
    """Light of two like components down a linear fibre of its own for each realization."""
    named = {name.replace("__", "."): value for name, value in changes.items()}
    plain = {
        "ensemble.window_ps": 2048.0,
        "ensemble.samples": 1024,
        "ensemble.max_lag_ps": 100.0,
        "ensemble.distances": 1,
        "ensemble.precision": "double",
        "ensemble.fibres": "drawn",
        "relation.kind": "identical",
        "line": [SPAN.model_dump()],
    }
    return with_changes(Experiment(), {**plain, **named})  # type: ignore[arg-type]


def test_delays_of_drawn_fibres_down_the_ensembles_path() -> None:
    """Impulses in either component taken down by the march of an ensemble: mean and Maxwellian.

    Their spectra at the end are the Jones matrices of the realizations' own fibres.
    """
    fibres = 400
    experiment = _drawn(ensemble__samples=256, ensemble__max_lag_ps=20.0)
    passage = Passage(experiment, 1)
    impulse = np.exp(-0.5 * ((np.arange(256) - 128) / 2.0) ** 2)
    matrices = np.empty((fibres, 2, 2, 2), dtype=complex)
    for component in range(2):
        field = np.zeros((fibres, 2, 256), dtype=complex)
        field[:, component] = impulse
        trip = passage.travel(field, (Leg(256, 1),), realizations=range(fibres), checked=False)
        spectrum = np.fft.fft(trip.field) / np.fft.fft(impulse)
        matrices[..., component] = np.moveaxis(spectrum[:, :, :2], 2, 1)
    step = 2.0 * np.pi / 2048.0
    delays = [
        abs(np.angle(np.divide(*np.linalg.eigvals(one @ zero.conj().T)))) / step
        for zero, one in matrices
    ]
    _check_delays(np.array(delays), 0.5 * np.sqrt(9.0), "a fibre for each realization")


def _mean_over_fibres(experiment: Experiment, grid: Grid, delay_ps: float) -> float:
    """C12(0) of identical components averaged over all fibres, in closed form.

    A section turns the Stokes vector by ωτ about an axis that is uniform on the sphere, so the
    mean of two Stokes vectors' product at ω and ω' scales by λ_J in each angular momentum J:
    λ_0 = (1 + 2cos(θ − θ'))/3, λ_2 = [tr O tr O' − λ_0 − (tr O tr O' − 1 − 2cos(θ + θ'))/2]/5
    (own derivation; λ_0^N tends to e^{−Δω²⟨τ²⟩/3} of Karlsson and Brentel, Opt. Lett. 24, 939,
    1999, from memory). With A_J = ΣΣ S S' λ_J^N and Stokes vector launched along S2,
    C12(0) = (A_0 + 2A_2)/3 / [1 + 2(A_0 − A_2)/3].
    """
    density = power_spectrum(experiment.source, grid)
    lit = density > 1e-12 * density.max()
    theta, weight = grid.omega[lit] * delay_ps, density[lit]
    here, there = theta[:, None], theta[None, :]
    traces = (1.0 + 2.0 * np.cos(here)) * (1.0 + 2.0 * np.cos(there))
    zero = (1.0 + 2.0 * np.cos(here - there)) / 3.0
    one = (traces - 1.0 - 2.0 * np.cos(here + there)) / 2.0
    two = (traces - zero - one) / 5.0
    a0, a2 = (float(weight @ x**PMD_SECTIONS @ weight) for x in (zero, two))
    return (a0 + 2.0 * a2) / 3.0 / (1.0 + 2.0 * (a0 - a2) / 3.0)


@pytest.mark.parametrize("coefficient", [1.0, 4.0])
def test_correlation_averaged_over_fibres(coefficient: float) -> None:
    """The ensemble's C12(0), and the theory's average over fibres, against that over all fibres."""
    experiment = _drawn(
        line__0__pmd_ps_per_sqrt_km=coefficient, line__0__gamma_per_w_km=0.0, source__width_ghz=40.0
    )
    bench = Bench(experiment)
    grid = bench.layouts[0].grid
    delay = coefficient * 3.0 / np.sqrt(8.0 * PMD_SECTIONS / (3.0 * np.pi))
    expected = _mean_over_fibres(experiment, grid, delay)
    blocks = Blocks(5)
    for start in range(0, 512, 64):
        rows = range(start, start + 64)
        seen = bench.follow(bench.passage.fields(rows), rows, bench.passage.expected())
        blocks.add(seen.moments[0][:, -1])
    value, error = blocks.estimate(lambda means: central(means)[..., None])
    source = "mean over the rotation group, own derivation"
    name = "PMD, a fibre for each realization: C12(0)"
    check(name, source, abs(value[0] - expected) / error[0], 4.0, "σ")
    theory = linear_correlations(experiment, grid).cross[0]
    # 64 fibres against 512 fibres with light of their own: a scatter of eight errors at most.
    check(
        f"{name} of the closed form's fibres", source, abs(theory - expected) / error[0], 8.0, "σ"
    )
    frozen = with_changes(experiment, {"ensemble.fibres": "frozen"})
    assert abs(linear_correlations(frozen, grid).cross[0] - expected) > 5.0 * error[0]


def test_a_drawn_fibre_belongs_to_its_realization() -> None:
    """The same in any batch, unlike its neighbours', and the one the matrices of theory have."""
    experiment = _drawn(line__0__pmd_ps_per_sqrt_km=6.0)
    line, seed = list(experiment.line), experiment.ensemble.seed
    whole = drawn_axes(line, seed, range(10))
    part = drawn_axes(line, seed, range(4, 6))
    assert whole[3] is not None
    assert part[3] is not None
    np.testing.assert_array_equal(whole[3][4:6], part[3])
    assert np.abs(whole[3][0] - whole[3][1]).max() > 1e-3
    grid = Grid(1024, 2.0)
    launched = synthesize(draw(3, range(4, 6), grid), input_response(experiment, grid))
    trip = Passage(experiment, 1).travel(
        launched, (Leg(1024, 1),), realizations=range(4, 6), checked=False
    )
    spectrum = np.fft.fft(launched)[:, :, None]
    made = sections(line, grid, experiment.source.wavelength_nm, seed)
    expected = np.fft.ifft(linear_response(made, spectrum, part)[:, :, 0])
    assert reference.relative_l2(trip.field, expected) < 1e-12
    with pytest.raises(ValueError, match="say which"):
        Passage(experiment, 1).travel(launched, (Leg(1024, 1),))
