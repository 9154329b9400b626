"""Spectra of the sources and the statistics of their draws."""

import numpy as np
import pytest

from solver.experiment import Experiment, Source, with_changes
from solver.grid import Grid
from solver.relation import input_response
from solver.source import draw, power_spectrum, synthesize

GRID = Grid(8192, 1.0)
SHAPES = ["gaussian", "super_gaussian", "rectangular", "sech2"]


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("width", [10.0, 40.0])
def test_full_width_at_half_maximum(shape: str, width: float) -> None:
    """The half-maximum points of every spectrum are ±half the width, to a bin."""
    density = power_spectrum(Source(shape=shape, width_ghz=width), GRID)
    assert density.sum() == pytest.approx(1.0, abs=1e-12)
    above = np.abs(GRID.frequency_thz[density >= 0.5 * density.max() * (1 - 1e-12)]) * 1e3
    bin_ghz = 1e3 / GRID.window_ps
    assert 2.0 * above.max() == pytest.approx(width, abs=2 * bin_ghz)


@pytest.mark.parametrize(
    ("shape", "order", "at_width"),
    [
        ("gaussian", 4, 2.0**-4),
        ("super_gaussian", 1, 2.0**-4),
        ("super_gaussian", 2, 2.0**-16),
        ("rectangular", 4, 0.0),
        ("sech2", 4, 1.0 / np.cosh(2.0 * np.arccosh(np.sqrt(2.0))) ** 2),
    ],
)
def test_shape_one_width_out(shape: str, order: int, at_width: float) -> None:
    """Density at twice the half-width relative to the peak: e.g. 1/9 for sech²."""
    width = 64.0 * 1e3 / GRID.window_ps
    density = power_spectrum(Source(shape=shape, width_ghz=width, order=order), GRID)
    assert density[64] / density[0] == pytest.approx(at_width, rel=1e-9)


def test_draws_are_circular_gaussian() -> None:
    """Moments of unit complex Gaussian noise within their standard errors."""
    noise = draw(5, range(64), Grid(1024, 1.0))
    n = noise[:, 0].size
    for part in (noise[:, 0], noise[:, 1]):
        power = np.abs(part) ** 2
        assert abs(part.mean()) < 4.0 / np.sqrt(n)
        assert abs((part**2).mean()) < 4.0 * np.sqrt(2.0 / n)
        assert abs(power.mean() - 1.0) < 4.0 / np.sqrt(n)
        assert abs((power**2).mean() - 2.0) < 4.0 * np.sqrt(20.0 / n)
    assert abs(np.vdot(noise[:, 0], noise[:, 1]) / n) < 4.0 / np.sqrt(n)
    assert abs(np.vdot(noise[:-1], noise[1:]) / n) < 4.0 / np.sqrt(n)


def test_a_realization_is_the_same_in_any_batch() -> None:
    """Child i of the seed, whatever is drawn beside it."""
    grid = Grid(256, 2.0)
    whole = draw(9, range(10), grid)
    np.testing.assert_array_equal(whole[3:7], draw(9, range(3, 7), grid))
    np.testing.assert_array_equal(whole[9:], draw(9, range(9, 10), grid))
    assert not np.array_equal(whole, draw(8, range(10), grid))


@pytest.mark.parametrize("relation", ["independent", "derivative", "hilbert", "partial"])
def test_a_finer_time_step_shows_the_same_light(relation: str) -> None:
    """Twice the samples in the same window: every other one is the light that was there."""
    changes = {"ensemble.window_ps": 2048.0, "ensemble.samples": 1024, "relation.kind": relation}
    experiment = with_changes(Experiment(), changes)
    fields = []
    for samples in (1024, 2048, 4096):
        grid = Grid(samples, 2048.0 / samples)
        noise = draw(3, range(2), grid)
        fields.append(synthesize(noise, input_response(experiment, grid)))
    scale = np.abs(fields[0]).max()
    np.testing.assert_allclose(fields[1][..., ::2], fields[0], atol=1e-10 * scale)
    np.testing.assert_allclose(fields[2][..., ::4], fields[0], atol=1e-10 * scale)


def test_power_of_the_ensemble_not_of_the_realization() -> None:
    """Launch powers are met on average, and single realizations scatter about them."""
    changes = {
        "ensemble.window_ps": 1024.0,
        "ensemble.samples": 512,
        "launch.total_power_mw": 120.0,
        "launch.share_1": 0.25,
        "relation.kind": "derivative",
    }
    experiment = with_changes(Experiment(), changes)
    grid = Grid(512, 2.0)
    response = input_response(experiment, grid)
    field = synthesize(draw(1, range(400), grid), response)
    power = np.mean(np.abs(field) ** 2, axis=2)
    error = power.std(axis=0) / np.sqrt(400)
    assert np.all(power.std(axis=0) > 0.05 * power.mean(axis=0))
    assert np.all(np.abs(power.mean(axis=0) - [0.03, 0.09]) < 4.0 * error)
    np.testing.assert_allclose(np.sum(np.abs(response) ** 2, axis=(1, 2)), [0.03, 0.09])
