"""The yardstick solves the same equation, to the accuracy it claims."""

import numpy as np
import pytest

from solver.experiment import Experiment, Span, with_changes
from solver.grid import Grid
from solver.propagation import propagate, relative_error
from solver.relation import input_response
from solver.source import draw, synthesize
from solver.statistics import central
from tests.benchmarks import plain

GRID = Grid(1024, 1.0)
SPAN = Span(length_km=8.0, beta2_ps2_per_km=16.6, loss_db_per_km=0.24, gamma_per_w_km=2.5)


def _fields(realizations: int, power_mw: float) -> np.ndarray:
    experiment = with_changes(
        Experiment(),
        {
            "launch.total_power_mw": power_mw,
            "ensemble.samples": GRID.samples,
            "ensemble.window_ps": GRID.window_ps,
        },
    )
    return synthesize(draw(3, range(realizations), GRID), input_response(experiment, GRID))


def _fibre(span: Span) -> plain.Fibre:
    assert span.beta2_ps2_per_km is not None
    return plain.Fibre(
        span.length_km,
        span.beta2_ps2_per_km,
        span.loss_db_per_km,
        span.gamma_per_w_km,
        *span.kerr_coefficients(),
    )


@pytest.mark.parametrize("coupling", ["manakov", "linear_birefringent", "uncoupled"])
@pytest.mark.parametrize("tolerance", [1e-2, 1e-3, 1e-4])
def test_its_steps_keep_the_error_it_claims(coupling: str, tolerance: float) -> None:
    """Steps are as few as can be: the error found is the true one, and near the tolerance."""
    span = SPAN.model_copy(update={"coupling": coupling})
    field = _fields(1, 100.0)
    truth = propagate(field, time_step_ps=GRID.time_step_ps, line=[span], tolerance=1e-8)
    assert truth.outcome.kind == "completed"
    steps, claimed = plain.steps_for(field[0], GRID.time_step_ps, _fibre(span), tolerance)
    found = plain.propagate(field[0], GRID.time_step_ps, _fibre(span), steps)
    error = relative_error(found[None], truth.field)
    assert claimed <= tolerance
    assert error == pytest.approx(claimed, rel=0.15)
    fewer = plain.propagate(field[0], GRID.time_step_ps, _fibre(span), int(0.85 * steps) - 1)
    assert relative_error(fewer[None], truth.field) > tolerance


def test_it_estimates_what_the_study_estimates() -> None:
    """Same moments, same ratio, over realizations together."""
    fields = _fields(3, 50.0)
    each = [plain.moments(field) for field in fields]
    mean = np.mean(each, axis=0)
    assert plain.central_correlation(each) == pytest.approx(float(central(mean)), rel=1e-12)
    i1, i2 = (np.abs(fields[:, j]).ravel() ** 2 for j in range(2))
    assert plain.central_correlation(each) == pytest.approx(np.corrcoef(i1, i2)[0, 1], rel=1e-10)
