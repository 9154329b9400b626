"""Thermal light under self- and cross-phase modulation alone: coherence and spectrum, exactly.

Without dispersion A_j(z, t) = A_j(0, t) exp{iB_s|a_j|² + iB_x|a_k|²}, a_j of unit mean power. For
a jointly circular Gaussian vector v of covariance Σ = ⟨v v†⟩ and any diagonal Q,

    ⟨v_a* v_b exp(−v†Qv)⟩ = [(1 + ΣQ)^{-1} Σ]_ba / det(1 + ΣQ)

(own derivation: e^{−v†Qv} tilts the Gaussian density into another one). With v = (a_1(t),
a_1(t + τ), a_2(t), a_2(t + τ)) and Q = i·diag(B_s, −B_s, B_x, −B_x) this is the coherence of
component 1. For independent components it closes to

    Γ_1(τ) = γ_1 / [(1 + B_s²(1 − |γ_1|²))² (1 + B_x²(1 − |γ_2|²))],

whose first factor is that of self-phase-modulated thermal light (Manassah, Opt. Lett. 15, 329,
1990 and 16, 1638, 1991, from memory).
"""

import numpy as np
import pytest

from solver.experiment import Experiment, Study, Sweep, Variant, with_changes
from solver.grid import Grid
from solver.propagation import propagate
from solver.relation import input_response
from solver.source import draw, synthesize
from solver.study import StudyState, execute
from solver.task import RoundTask
from solver.theory import mutual_coherence
from tests.checks import check

WINDOW_PS, SAMPLES = 2048.0, 1024
GRID = Grid(SAMPLES, WINDOW_PS / SAMPLES)
SOURCE = "Gaussian moment theorem, own derivation; Manassah 1990–1991, from memory"
LOSS_DB_PER_KM, LENGTH_KM, GAMMA = 0.3, 6.0, 2.5


def _experiment(relation: str, coupling: str, power_mw: float) -> Experiment:
    return with_changes(
        Experiment(),
        {
            "ensemble.window_ps": WINDOW_PS,
            "ensemble.samples": SAMPLES,
            "ensemble.max_lag_ps": 100.0,
            "ensemble.distances": 1,
            "source.width_ghz": 12.0,
            "relation.kind": relation,
            "launch.total_power_mw": power_mw,
            "line": [
                {
                    "length_km": LENGTH_KM,
                    "beta2_ps2_per_km": 0.0,
                    "loss_db_per_km": LOSS_DB_PER_KM,
                    "gamma_per_w_km": GAMMA,
                    "coupling": coupling,
                }
            ],
        },
    )


def _phases(experiment: Experiment) -> tuple[float, float]:
    """B_s, B_x: mean phases, the effective length written out."""
    alpha = LOSS_DB_PER_KM * np.log(10.0) / 10.0
    effective = (1.0 - np.exp(-alpha * LENGTH_KM)) / alpha
    own, other = experiment.line[0].kerr_coefficients()
    mean_w = 0.5e-3 * experiment.launch.total_power_mw
    return GAMMA * own * mean_w * effective, GAMMA * other * mean_w * effective


def _coherence(experiment: Experiment) -> np.ndarray:
    """Γ_1(τ)/Γ_1(0) from the launch's own coherence; lags in FFT order."""
    gamma = mutual_coherence(input_response(experiment, GRID))
    gamma = gamma / gamma[0, 0, 0].real  # both components have the same power
    own, other = _phases(experiment)
    q = 1j * np.diag([own, -own, other, -other])
    at_zero, found = gamma[:, :, 0], np.empty(GRID.samples, dtype=complex)
    for lag in range(GRID.samples):
        # gamma[j, k, τ] = ⟨a_j*(t) a_k(t + τ)⟩; Σ_xy = ⟨x y*⟩.
        sigma = np.empty((4, 4), dtype=complex)
        sigma[0::2, 0::2] = sigma[1::2, 1::2] = at_zero.T
        sigma[1::2, 0::2] = gamma[:, :, lag].T
        sigma[0::2, 1::2] = gamma[:, :, lag].conj()
        mixed = np.eye(4) + sigma @ q
        found[lag] = np.linalg.solve(mixed, sigma)[1, 0] / np.linalg.det(mixed)
    return found


CASES = [
    ("independent", "linear_birefringent"),
    ("independent", "uncoupled"),
    ("independent", "isotropic_circular"),
    ("derivative", "manakov"),
    ("identical", "manakov"),
    ("partial", "isotropic_circular"),
]


def test_closed_form_of_independent_components() -> None:
    """The general expression falls back on the short one, and identical light on B_s + B_x."""
    experiment = _experiment("independent", "linear_birefringent", 300.0)
    own, other = _phases(experiment)
    gamma = mutual_coherence(input_response(experiment, GRID))
    gamma = gamma[[0, 1], [0, 1]] / gamma[[0, 1], [0, 1], :1].real
    rest = 1.0 - np.abs(gamma) ** 2
    short = gamma[0] / (1.0 + own**2 * rest[0]) ** 2 / (1.0 + other**2 * rest[1])
    np.testing.assert_allclose(_coherence(experiment), short, atol=1e-12)
    same = _experiment("identical", "manakov", 300.0)
    both = sum(_phases(same))
    short = gamma[0] / (1.0 + both**2 * rest[0]) ** 2
    np.testing.assert_allclose(_coherence(same), short, atol=1e-12)


@pytest.mark.parametrize(("relation", "coupling"), CASES)
@pytest.mark.parametrize("power_mw", [60.0, 250.0])
def test_coherence_of_an_ensemble(relation: str, coupling: str, power_mw: float) -> None:
    """⟨A_1*(t) A_1(t + τ)⟩ of propagated fields at every lag up to 60 ps."""
    experiment = _experiment(relation, coupling, power_mw)
    field = synthesize(draw(4, range(384), GRID), input_response(experiment, GRID))
    out = propagate(
        field, time_step_ps=GRID.time_step_ps, line=list(experiment.line), tolerance=1e-2
    )
    assert out.outcome.kind == "completed"
    density = np.abs(np.fft.fft(out.field[:, 0])) ** 2
    rows = np.fft.ifft(density)[:, :30] / SAMPLES
    scale = rows[:, 0].real.mean()
    expected = _coherence(experiment)[:30]
    # The error of a ratio: that of the numerator less its share of the denominator's.
    off = rows - expected * rows[:, :1].real
    for part in (off.real, off.imag):
        error = part.std(axis=0, ddof=1)[1:] / np.sqrt(len(rows)) / scale
        pull = (part.mean(axis=0)[1:] / scale) / error
        check(
            "thermal light under Kerr phase alone: coherence at every lag",
            SOURCE,
            np.abs(pull).max(),
            4.5,
            "σ",
        )
    assert np.abs(np.abs(expected[15]) - np.abs(_unmodulated(experiment)[15])) > 5.0 * error.max()


def _unmodulated(experiment: Experiment) -> np.ndarray:
    gamma = mutual_coherence(input_response(experiment, GRID))[0, 0, :30]
    return np.asarray(gamma / gamma[0].real)


def test_spectrum_that_a_study_reports() -> None:
    """The output spectrum of a run with its standard error, against the transform of Γ_1(τ)."""
    experiment = with_changes(
        _experiment("independent", "linear_birefringent", 200.0),
        {"ensemble.min_realizations": 512, "ensemble.max_realizations": 512},
    )
    study = Study(
        experiment=experiment,
        sweep=Sweep(points=1, start=200.0, stop=201.0),
        variants=(Variant(name="only"),),
    )
    state = StudyState(study)
    waiting = [task for task in state.ready() if isinstance(task, RoundTask)]
    while waiting:
        task = waiting.pop()
        waiting += state.absorb(task, execute(task))  # type: ignore[arg-type]
    point = state.point(0, 0)
    assert point is not None
    assert point.outcome == "completed"
    value, error = point.estimates["output1"]
    density = np.fft.fft(_coherence(experiment)).real / SAMPLES
    power_w = 0.1 * 10 ** (-LOSS_DB_PER_KM * LENGTH_KM / 10.0)
    expected = GRID.by_offset(power_w * density) * WINDOW_PS / 1e3
    expected = expected.reshape(value.size, -1).mean(axis=1)
    # The far wings are made by rare bright moments: their errors are not normal.
    bright = expected > 1e-2 * expected.max()
    pull = (value[bright] - expected[bright]) / error[bright]
    check(
        "thermal light under Kerr phase alone: spectrum of a run",
        SOURCE,
        np.abs(pull).max(),
        4.5,
        "σ",
    )
    assert 0.6 < np.mean(pull**2) < 1.5
    launched = point.estimates["input1"].value
    assert np.abs(launched[bright] - expected[bright]).max() > 20.0 * error[bright].max()
