"""Estimates from which what chance did to a quantity of known expectation has been taken out."""

from collections.abc import Callable

import numpy as np
import pytest

from solver.accumulators import FEWEST_CONTROLLED, MOST_BLOCKS, Blocks, Control, Estimate
from solver.experiment import Ensemble, Experiment, with_changes
from solver.features import moments
from solver.fibre import linear_response, sections
from solver.grid import Grid, Real
from solver.layout import Layout
from solver.relation import input_response
from solver.source import draw, synthesize
from solver.statistics import central, last_central, launch_control
from solver.theory import launched_central
from tests.checks import check

CONTROL = Control(lambda means: means[..., :1], np.zeros(1))


def _second(means: Real) -> Real:
    return means[..., 1:]


def _pairs(count: int, correlation: float, seed: int) -> np.ndarray:
    """Gaussian pairs of mean 0 and 3, of variance 1, with this correlation."""
    x, y = np.random.default_rng(seed).standard_normal((2, count))
    return np.stack([x, 3.0 + correlation * x + np.sqrt(1.0 - correlation**2) * y], axis=1)


def _estimate(rows: np.ndarray, function: Callable[[Real], Real], control: Control) -> Estimate:
    blocks = Blocks(rows.shape[1])
    blocks.add(rows)
    return blocks.estimate(function, control)


def test_it_is_the_regression_on_the_control() -> None:
    """The line fitted through the pairs by least squares, read where the control is expected."""
    rows = _pairs(60, 0.8, 3)
    slope, level = np.polyfit(rows[:, 0], rows[:, 1], 1)
    value, _ = _estimate(rows, _second, CONTROL)
    assert value[0] == pytest.approx(level, rel=1e-10)
    shifted = Control(lambda means: means[..., :1], np.array([0.3]))
    value, _ = _estimate(rows, _second, shifted)
    assert value[0] == pytest.approx(level + 0.3 * slope, rel=1e-10)


def test_the_error_is_that_of_fits_with_each_group_left_out() -> None:
    """The plain delete-one jackknife of the fitted level, worked out fit by fit.

    The estimator takes the same fits from their leverages instead, which replaces the spread of
    n pseudo-values about their mean by that about their centre: the same to order 1/n.
    """
    for seed in range(5):
        rows = _pairs(40, 0.8, seed)
        levels = [np.polyfit(*np.delete(rows, i, axis=0).T, 1)[1] for i in range(len(rows))]
        n = len(rows)
        expected = np.sqrt((n - 1) / n * np.sum((levels - np.mean(levels)) ** 2))
        _, error = _estimate(rows, _second, CONTROL)
        assert error[0] == pytest.approx(expected, rel=1.5 / n)


@pytest.mark.parametrize("count", [FEWEST_CONTROLLED, 12, 40])
@pytest.mark.parametrize("correlation", [0.0, 0.6, 0.95])
def test_variance_bias_and_coverage(count: int, correlation: float) -> None:
    """Gaussian pairs: no bias, variance (1 − ρ²)(n − 2)/(n − 3)/n, honest bars.

    Lavenberg and Welch's loss factor for one control. All to the scatter of 1500 repetitions.
    """
    repetitions = 1500
    found = [
        _estimate(_pairs(count, correlation, 1000 + k), _second, CONTROL)
        for k in range(repetitions)
    ]
    off = np.array([estimate.value[0] - 3.0 for estimate in found])
    bars = np.array([estimate.standard_error[0] for estimate in found])
    expected = (1.0 - correlation**2) * (count - 2) / (count - 3) / count
    name = "control variate of Gaussian pairs"
    bias = abs(off.mean()) / np.sqrt(expected / repetitions)
    check(f"{name}: bias", "unbiased regression", bias, 3.5, "σ")
    # Fourth moments of the estimate exceed a Gaussian's a little where there are few groups.
    scatter = np.std(off**2, ddof=1) / np.sqrt(repetitions)
    excess = abs(np.mean(off**2) - expected) / scatter
    source = "loss factor (n − 2)/(n − 3) of Lavenberg and Welch, Manage. Sci. 27, 322 (1981)"
    check(f"{name}: variance", source, excess, 3.5, "σ")
    # The bar tells the spread, and a one-sigma bar what it says, to order one over the groups.
    inside = np.mean(np.abs(off) < bars)
    honest = 0.6827
    slack = 3.5 * np.sqrt(honest * (1.0 - honest) / repetitions)
    assert honest - slack - 0.35 / count < inside < honest + slack + 0.35 / count
    assert 1.0 - slack < np.sqrt(np.mean(bars**2) / expected) < 1.0 + slack + 1.5 / count


@pytest.mark.parametrize("count", [MOST_BLOCKS + 5, 2 * MOST_BLOCKS + 37])
def test_groups_of_unequal_size(count: int) -> None:
    """Merged blocks, the last partly filled: neither bias nor a bar of the wrong size."""
    found = [_estimate(_pairs(count, 0.8, 50 + k), _second, CONTROL) for k in range(300)]
    pulls = np.array([(e.value[0] - 3.0) / e.standard_error[0] for e in found])
    inside = np.mean(np.abs(pulls) < 1.0)
    assert abs(pulls.mean()) < 3.5 / np.sqrt(300)
    assert abs(inside - 0.6827) < 3.5 * np.sqrt(0.6827 * 0.3173 / 300)


@pytest.mark.parametrize("count", [2, FEWEST_CONTROLLED - 1])
def test_few_groups_are_left_alone(count: int) -> None:
    """A control would cost more degrees of freedom than it is worth."""
    rows = _pairs(count, 0.95, 1)
    blocks = Blocks(2)
    blocks.add(rows)
    for with_control, plain in zip(
        blocks.estimate(_second, CONTROL), blocks.estimate(_second), strict=True
    ):
        np.testing.assert_array_equal(with_control, plain)


@pytest.mark.parametrize("copies", [0.0, 1.0])
def test_a_control_that_says_nothing_new_changes_nothing(copies: float) -> None:
    """One that chance leaves alone, or that repeats another, has no say."""
    rows = _pairs(30, 0.8, 2)
    rows = np.concatenate([rows, copies * rows[:, :1]], axis=1)
    both = Control(lambda means: means[..., [0, 2]], np.zeros(2))
    one, two = (_estimate(rows, lambda m: m[..., 1:2], control) for control in (CONTROL, both))
    np.testing.assert_allclose(two.value, one.value, rtol=1e-9)
    np.testing.assert_allclose(two.standard_error, one.standard_error, rtol=1e-7)


EXPERIMENT = with_changes(
    Experiment(),
    {
        "ensemble.window_ps": 1024.0,
        "ensemble.samples": 256,
        "ensemble.max_lag_ps": 100.0,
        "ensemble.distances": 1,
        "relation.kind": "partial",
        "relation.correlation": 0.3,
        "line.*.gamma_per_w_km": 0.0,
        "line.*.delay_ps_per_km": 2.0,
    },
)
"""Light whose components walk off: C12(0) at the end is not that at the launch, and is known."""


def test_at_the_launch_nothing_is_left_to_chance() -> None:
    """The value is the closed form and its error zero, whatever the light drawn."""
    grid = Grid(256, 4.0)
    light = synthesize(draw(1, range(24), grid), input_response(EXPERIMENT, grid))
    rows = moments(np.abs(light) ** 2)
    launched = launched_central(EXPERIMENT, grid)
    assert launched == pytest.approx(0.3, rel=1e-6)
    value, error = _estimate(
        rows, lambda means: central(means)[..., None], launch_control(launched)
    )
    assert value[0] == pytest.approx(launched, abs=1e-12)
    assert error[0] < 1e-12
    assert _plain(rows).standard_error[0] > 1e-3


def _plain(rows: np.ndarray) -> Estimate:
    blocks = Blocks(5)
    blocks.add(rows)
    return blocks.estimate(lambda means: central(means)[..., None])


def test_coverage_of_the_controlled_bar() -> None:
    """C12(0) at the end of a line that is known in closed form: 400 ensembles of 24.

    As many within one standard error and within two as Student's t of 22 degrees of freedom
    says, to the scatter of a binomial count, and no bias.
    """
    grid = Grid(256, 4.0)
    layout = Layout.of(Ensemble(window_ps=1024.0, samples=256, distances=1, max_lag_ps=100.0))
    response = input_response(EXPERIMENT, grid)
    line = sections(EXPERIMENT.line, grid, EXPERIMENT.source.wavelength_nm, 0)
    noise = draw(5, range(24 * 400), grid)
    launched, arrived = (
        moments(np.abs(synthesize(noise, r)) ** 2).reshape(400, 24, 5)
        for r in (response, linear_response(line, response))
    )
    expected = launched_central(EXPERIMENT, grid)
    truth = _linear_central(linear_response(line, response))
    assert 0.02 < truth < 0.9 * expected
    pulls, gains = [], []
    for start, end in zip(launched, arrived, strict=True):
        blocks = Blocks(layout.block_features)
        rows = np.zeros((24, layout.block_features))
        rows[:, :5], rows[:, 5:10] = start, end
        blocks.add(rows)
        value, error = last_central(layout, blocks, expected)
        pulls.append((value[0] - truth) / error[0])
        gains.append(_plain(end).standard_error[0] / error[0])
    for limit, share in ((1.0, 0.672), (2.0, 0.942)):
        scatter = np.sqrt(share * (1.0 - share) / 400)
        assert abs(np.mean(np.abs(pulls) < limit) - share) < 3.5 * scatter
    assert abs(np.mean(pulls)) < 3.5 * np.std(pulls) / 20.0
    assert np.mean(gains) > 1.0


def _linear_central(response: np.ndarray) -> float:
    """C12(0) of Gaussian light of this response, by the moment theorem written out."""
    mutual = np.einsum("jdf,kdf->jk", response.conj(), response)
    return float(abs(mutual[0, 1]) ** 2 / (mutual[0, 0] * mutual[1, 1]).real)
