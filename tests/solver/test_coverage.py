"""Whether error bars are as long as they say: coverage over many independent repetitions.

One long ensemble is cut into repetitions of a study's usual size. The long-run value is that of
all of them together, whose own error is a twentieth of a repetition's.
"""

from collections.abc import Mapping

import numpy as np
import pytest

from solver.ensemble import run_round
from solver.experiment import Experiment
from solver.statistics import Blocks, Estimate, Estimators, Layout, Means, sums_and_squares
from solver.task import CHUNK, RoundTask
from tests.checks import check

REPETITIONS = 400
SIZE = 24
"""Realizations in each."""
NOMINAL, ALLOWED = 0.68, 0.07
EXPERIMENT = Experiment.model_validate(
    {
        "relation": {"kind": "derivative"},
        "launch": {"total_power_mw": 300.0},
        "line": [{"length_km": 4.0, "beta2_ps2_per_km": 17.0, "gamma_per_w_km": 2.5}],
        "ensemble": {
            "window_ps": 1024.0,
            "samples": 512,
            "distances": 4,
            "max_lag_ps": 200.0,
            "seed": 5,
        },
    }
)
LAYOUT = Layout.of(EXPERIMENT.ensemble)


@pytest.fixture(scope="module")
def repetitions() -> tuple[list[Mapping[str, Estimate]], Mapping[str, Estimate]]:
    """Each repetition's estimates, and those of all realizations together."""
    first = run_round(RoundTask("first", 0, 0, 0, EXPERIMENT, 0, CHUNK, schedule=None))
    assert first.findings is not None
    launched, schedule = first.findings.linear.launched, first.findings.schedule
    count = REPETITIONS * SIZE
    task = RoundTask("all", 0, 0, 0, EXPERIMENT, CHUNK, count, schedule=schedule)
    outcome = run_round(task)
    assert outcome.outcome == "completed"

    def estimates(rows: np.ndarray) -> Mapping[str, Estimate]:
        blocks, means = Blocks(LAYOUT.block_features), Means(LAYOUT.mean_features)
        blocks.add(rows)
        means.add(len(rows), sums_and_squares(np.zeros((len(rows), LAYOUT.mean_features))))
        return Estimators(LAYOUT, blocks, means, launched)

    cut = outcome.blocks.reshape(REPETITIONS, SIZE, -1)
    return [estimates(rows) for rows in cut], estimates(outcome.blocks)


def _coverage(
    found: tuple[list[Mapping[str, Estimate]], Mapping[str, Estimate]], name: str
) -> np.ndarray:
    """Share of the repetitions whose one-sigma bar holds the long-run value, element by element."""
    each, whole = found
    value, error = (np.stack([estimates[name][part] for estimates in each]) for part in (0, 1))
    return np.asarray(np.mean(np.abs(value - whole[name].value) <= error, axis=0))


def _assert_nominal(what: str, coverage: float) -> None:
    check(
        f"coverage of one-sigma bars: {what}",
        "share of a normal distribution within one deviation",
        abs(coverage - NOMINAL),
        ALLOWED,
    )


def test_the_kerr_effect_matters(
    repetitions: tuple[list[Mapping[str, Estimate]], Mapping[str, Estimate]],
) -> None:
    """The light whose bars are tested is far from that of the launch."""
    value, error = repetitions[1]["distance"]
    assert value[-1] < -0.1
    assert error[-1] < 0.003


def test_central_correlation_along_the_line(
    repetitions: tuple[list[Mapping[str, Estimate]], Mapping[str, Estimate]],
) -> None:
    """C12(0) with its control variate, at every distance behind the launch."""
    for distance, coverage in enumerate(_coverage(repetitions, "distance")[1:], 1):
        _assert_nominal(f"C12(0) at distance {distance} of 4", coverage)


@pytest.mark.parametrize("name", ["auto1", "auto2", "sum", "cross"])
def test_correlations_at_several_lags(
    repetitions: tuple[list[Mapping[str, Estimate]], Mapping[str, Estimate]], name: str
) -> None:
    """From the central peak out to lags at which nothing is left of it."""
    coverage = _coverage(repetitions, name)
    for lag_ps in (4.0, 10.0, 20.0, 40.0, 100.0):
        at = int(np.argmin(np.abs(LAYOUT.lag_ps - lag_ps)))
        _assert_nominal(f"{name} at {lag_ps:g} ps", coverage[at])


@pytest.mark.parametrize("name", ["mean_duration_ps", "walls_per_ns", "moment_cross"])
def test_domains_and_moments(
    repetitions: tuple[list[Mapping[str, Estimate]], Mapping[str, Estimate]], name: str
) -> None:
    """Domain duration and wall count; the moment ratio."""
    _assert_nominal(name, float(_coverage(repetitions, name)[0]))


def test_degree_of_polarization_of_unpolarized_light(
    repetitions: tuple[list[Mapping[str, Estimate]], Mapping[str, Estimate]],
) -> None:
    """A length cannot fall below zero: its bars are somewhat too long there, never too short."""
    assert repetitions[1]["polarization_degree"].value[1] < 0.01
    assert NOMINAL - ALLOWED < _coverage(repetitions, "polarization_degree")[1] < 0.9
