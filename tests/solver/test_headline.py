"""The headline study at a reduced ensemble, against common practice (no published source)."""

from collections.abc import Sequence
from itertools import chain

import numpy as np
import pytest

from solver.experiment import Experiment, Study, Sweep, with_changes
from solver.result import PointResult
from solver.study import StudyState, execute
from solver.task import RoundTask
from tests.checks import check

POINTS = 6
INDEPENDENT, DERIVATIVE, UNCOUPLED = range(3)


@pytest.fixture(scope="module")
def curves() -> list[list[PointResult]]:
    """Points of each variant, by the path a worker takes."""
    changes = {
        "ensemble.window_ps": 4096.0,
        "ensemble.samples": 2048,
        "ensemble.min_realizations": 48,
        "ensemble.max_realizations": 48,
        "ensemble.distances": 4,
    }
    study = Study(experiment=with_changes(Experiment(), changes), sweep=Sweep(points=POINTS))
    state = StudyState(study)
    waiting = [task for task in state.ready() if isinstance(task, RoundTask)]
    while waiting:
        task = waiting.pop()
        waiting += state.absorb(task, execute(task))  # type: ignore[arg-type]
    assert state.finished
    found = [[state.point(v, p) for p in range(POINTS)] for v in range(3)]
    return [[point for point in row if point is not None] for row in found]


def _central(points: Sequence[PointResult]) -> tuple[np.ndarray, np.ndarray]:
    pairs = [point.central for point in points]
    assert len(pairs) == POINTS
    value, error = np.array(pairs, dtype=float).T
    return value, error


def test_every_point_is_sound(curves: list[list[PointResult]]) -> None:
    """Completed, resolved, and with a discretization error below its statistical one."""
    for point in chain.from_iterable(curves):
        assert point.outcome == "completed"
        assert point.central is not None
        assert 0.001 < point.central[1] < 0.02
        assert point.discretization_error < 0.5 * point.central[1]


def test_derivative_starts_at_zero(curves: list[list[PointResult]]) -> None:
    """At the launch exactly, whatever the power; and still near it behind the fibre at 5 mW."""
    for variant in (DERIVATIVE, UNCOUPLED):
        for point in curves[variant]:
            value, error = point.estimates["distance"]
            assert abs(value[0]) < 1e-12
            assert error[0] < 1e-12
    value, error = _central(curves[UNCOUPLED])
    assert abs(value[0]) < 4.0 * error[0]
    check(
        "headline, derivative relation, coupling off: C12(0) is near zero at 5 mW",
        "common practice",
        abs(value[0]),
        0.03,
    )


def test_coupling_off_rises(curves: list[list[PointResult]]) -> None:
    """C12(0) rises with power where the components do not see one another, then saturates."""
    value, error = _central(curves[UNCOUPLED])
    assert np.all(np.diff(value)[:4] > 0.0)
    assert np.all(value[2:] > 5.0 * error[2:])
    assert value[4] > 0.15


def test_coupling_on_falls(curves: list[list[PointResult]]) -> None:
    """C12(0) falls with power to a deep negative dip."""
    for variant in (INDEPENDENT, DERIVATIVE):
        value, error = _central(curves[variant])
        assert np.all(np.diff(value) < 0.0)
        assert np.all(value[2:] < -5.0 * error[2:])
        assert value[-1] < -0.3


def test_related_and_unrelated_inputs_fall_alike(curves: list[list[PointResult]]) -> None:
    """Within 0.06 of each other at every power."""
    independent, derivative = (_central(curves[v])[0] for v in (INDEPENDENT, DERIVATIVE))
    check(
        "headline: related and unrelated inputs fall alike, difference of C12(0)",
        "common practice",
        np.abs(independent - derivative).max(),
        0.06,
    )


def test_the_dip_deepens_along_the_fibre(curves: list[list[PointResult]]) -> None:
    """From zero at the launch to the dip at the end, at the highest power."""
    value = curves[INDEPENDENT][-1].estimates["distance"].value
    assert value[-1] < -0.3
    assert value[0] > value[1]


def test_the_spectrum_broadens_with_power(curves: list[list[PointResult]]) -> None:
    """Self-phase modulation of normally dispersive light, and loss of power as stated."""
    layout_ghz = np.linspace(-250.0, 250.0, curves[0][0].estimates["output1"].value.size)
    widths = []
    for point in curves[INDEPENDENT]:
        spectrum = point.estimates["output1"].value
        mean = np.sum(layout_ghz * spectrum) / np.sum(spectrum)
        widths.append(np.sqrt(np.sum((layout_ghz - mean) ** 2 * spectrum) / np.sum(spectrum)))
        powers = point.estimates["powers"].value
        assert powers[2] / powers[0] == pytest.approx(10 ** (-0.24 * 8 / 10), rel=1e-3)
    assert np.all(np.diff(widths) > 0.0)
    assert widths[-1] > 1.5 * widths[0]
