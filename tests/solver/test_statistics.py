"""Accumulators and their error bars against textbook formulas and simulation."""

import numpy as np
import pytest

from solver.experiment import Ensemble, Experiment, with_changes
from solver.features import (
    Observed,
    domain_features,
    features,
    moments,
    power_densities,
    raw_correlations,
)
from solver.grid import Grid
from solver.relation import input_response
from solver.source import draw, synthesize
from solver.statistics import (
    CORRELATIONS,
    DURATION_BINS,
    ESTIMATES,
    MOST_BLOCKS,
    Blocks,
    Estimators,
    Layout,
    Means,
    central,
    last_central,
    sums_and_squares,
)
from tests import reference
from tests.checks import check

ENSEMBLE = Ensemble(window_ps=1024.0, samples=512, max_lag_ps=100.0, distances=2)
LAYOUT = Layout.of(ENSEMBLE)
GRID = Grid(512, 2.0)


def _observed(field: np.ndarray, power: np.ndarray, along: np.ndarray) -> Observed:
    """The same light at both ends of the line, seen without noise."""
    mean_w = power.mean(axis=(0, 2))
    samples = power.shape[2]
    return Observed(
        launched=field,
        arrived=field,
        received=field,
        detected=power,
        received_w=mean_w,
        detected_w=mean_w,
        known_noise_w2=np.zeros((2, samples)),
        moments=along,
        walls=np.ones(along.shape[:2]),
    )


def _rows(n: int, features_: int = 2, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).gamma(3.0, size=(n, features_))


def test_jackknife_of_a_mean_is_the_standard_error() -> None:
    """For a mean of n samples in blocks of one, s/√n exactly."""
    rows = _rows(100)
    blocks = Blocks(2)
    blocks.add(rows)
    value, error = blocks.estimate(lambda means: means)
    np.testing.assert_allclose(value, rows.mean(axis=0), rtol=1e-13)
    np.testing.assert_allclose(error, rows.std(axis=0, ddof=1) / 10.0, rtol=1e-10)


def test_jackknife_of_a_ratio_is_that_of_the_delta_method() -> None:
    """Cochran, Sampling Techniques: var(x̄/ȳ) ≈ var(x − Ry)/(nȳ²), to order 1/n."""
    rows = _rows(128)
    blocks = Blocks(2)
    blocks.add(rows)
    value, error = blocks.estimate(lambda m: (m[..., 0] / m[..., 1])[..., None])
    ratio = rows[:, 0].mean() / rows[:, 1].mean()
    residual = (rows[:, 0] - ratio * rows[:, 1]).std(ddof=1)
    assert value[0] == pytest.approx(ratio, rel=1e-12)
    assert error[0] == pytest.approx(residual / rows[:, 1].mean() / np.sqrt(128), rel=0.02)


def test_blocks_of_unequal_size() -> None:
    """When blocks have been merged and the last one is partly filled, the error is still right."""
    n = MOST_BLOCKS * 2 + 37
    errors = []
    for seed in range(40):
        rows = _rows(n, 1, seed)
        blocks = Blocks(1)
        blocks.add(rows)
        value, error = blocks.estimate(lambda means: means)
        assert value[0] == pytest.approx(rows.mean(), rel=1e-12)
        errors.append(error[0] / (rows.std(ddof=1) / np.sqrt(n)))
    assert len(set(blocks.counts)) > 1
    spread = np.std(errors, ddof=1) / np.sqrt(len(errors))
    assert abs(np.mean(errors) - 1.0) < 4.0 * spread


def test_memory_does_not_grow() -> None:
    """However many realizations come, no more than the stated number of blocks."""
    blocks = Blocks(3)
    for _ in range(40):
        blocks.add(_rows(100, 3))
        assert len(blocks.counts) <= MOST_BLOCKS
    assert blocks.realizations == 4000
    np.testing.assert_allclose(blocks.sums.sum(axis=0), 40 * _rows(100, 3).sum(axis=0), rtol=1e-12)


def test_one_block_has_no_error_yet() -> None:
    """Not zero: not known."""
    blocks = Blocks(1)
    blocks.add(np.ones((1, 1)))
    assert np.isnan(blocks.estimate(lambda means: means).standard_error).all()
    means = Means(1)
    means.add(1, np.ones((2, 1)))
    assert np.isnan(means.estimate().standard_error).all()


def test_means() -> None:
    """Mean and s/√n, however the rows were split."""
    rows = _rows(90, 4)
    means = Means(4)
    for part in (rows[:7], rows[7:50], rows[50:]):
        means.add(len(part), sums_and_squares(part))
    value, error = means.estimate()
    np.testing.assert_allclose(value, rows.mean(axis=0), rtol=1e-12)
    np.testing.assert_allclose(error, rows.std(axis=0, ddof=1) / np.sqrt(90), rtol=1e-9)


def _gaussian_light(experiment: Experiment, seed: int, n: int) -> np.ndarray:
    grid = Grid(experiment.ensemble.samples, experiment.ensemble.time_step_ps)
    noise = draw(seed, range(n), grid)
    return np.abs(synthesize(noise, input_response(experiment, grid))) ** 2


@pytest.mark.parametrize("relation", ["independent", "partial"])
def test_coverage_of_the_error_bar(relation: str) -> None:
    """C12(0) of drawn light lies within its error bar as often as Student's t says.

    24 realizations, 300 ensembles: 67 % within one and 94 % within two standard errors, to the
    scatter of a binomial count; and the bar is of the right size on average.
    """
    changes = {
        "ensemble.window_ps": 1024.0,
        "ensemble.samples": 256,
        "ensemble.max_lag_ps": 100.0,
        "relation.kind": relation,
        "relation.correlation": 0.3,
    }
    experiment = with_changes(Experiment(), changes)
    truth = 0.3 if relation == "partial" else 0.0
    size, ensembles = 24, 300
    rows = moments(_gaussian_light(experiment, 77, size * ensembles)).reshape(ensembles, size, 5)
    pulls, values, errors = [], [], []
    for part in rows:
        blocks = Blocks(5)
        blocks.add(part)
        value, error = blocks.estimate(lambda means: central(means)[..., None])
        values.append(value[0])
        errors.append(error[0])
        pulls.append((value[0] - truth) / error[0])
    pull = np.abs(pulls)
    for limit, share in ((1.0, 0.672), (2.0, 0.943)):
        scatter = np.sqrt(share * (1.0 - share) / ensembles)
        check(
            f"C12(0): share within ±{limit:g} standard error, 300 ensembles of 24",
            "Student's t of 23 degrees of freedom",
            abs(np.mean(pull < limit) - share) / scatter,
            3.5,
            "σ",
        )
    spread = np.std(values, ddof=1)
    rms = np.sqrt(np.mean(np.square(errors)))
    assert rms == pytest.approx(spread, rel=3.5 / np.sqrt(2.0 * ensembles))


def test_correlations_are_the_direct_sums() -> None:
    """Periodic sums over time, lag by lag, in the documented order and sign."""
    power = np.random.default_rng(3).gamma(2.0, size=(2, 2, 512))
    found = raw_correlations(power, LAYOUT)
    n, stride = LAYOUT.lags, LAYOUT.lag_stride
    for r in range(2):
        first, second = power[r]
        auto1 = [np.mean(first * np.roll(first, -k * stride)) for k in range(n + 1)]
        auto2 = [np.mean(second * np.roll(second, -k * stride)) for k in range(n + 1)]
        cross = [np.mean(first * np.roll(second, -k * stride)) for k in range(-n, n + 1)]
        np.testing.assert_allclose(found[r], np.concatenate([auto1, auto2, cross]), rtol=1e-11)
    np.testing.assert_allclose(LAYOUT.lag_ps, np.arange(-50, 51) * 2.0)


def test_a_finer_time_step_keeps_the_lags() -> None:
    """Light sampled twice as finely has its correlations at the same lags, on the same axis."""
    spectrum = np.zeros((1, 2, 512), dtype=complex)
    spectrum[..., :30] = np.random.default_rng(2).standard_normal((1, 2, 30))
    fine = np.concatenate([spectrum, np.zeros((1, 2, 512))], axis=2)
    fields = [np.fft.ifft(s, norm="forward") for s in (spectrum, fine)]
    rows = [raw_correlations(np.abs(f) ** 2, LAYOUT) for f in fields]
    np.testing.assert_allclose(rows[1], rows[0], rtol=1e-10)
    densities = [power_densities(f, LAYOUT)[0] for f in fields]
    np.testing.assert_allclose(densities[1], densities[0], atol=1e-9)


@pytest.mark.parametrize("samples", [512, 4096])
def test_spectra_integrate_to_the_power(samples: int) -> None:
    """W/GHz over the frequency axis gives W; a line below the carrier sits at negative offset."""
    layout = Layout.of(Ensemble(window_ps=2.0 * samples, samples=samples))
    field = reference.stirred_light(4, 2, samples, 2.0, 0.03, 0.07)
    density = power_densities(field, layout)[0].reshape(2, 2, -1)
    spacing = np.diff(layout.offset_ghz)
    np.testing.assert_allclose(spacing, spacing[0], rtol=1e-9)
    np.testing.assert_allclose(
        density.sum(axis=2) * spacing[0], np.mean(np.abs(field) ** 2, axis=2), rtol=1e-10
    )
    # The carrier is e^{−iω0t}: e^{+iΩt} lowers the optical frequency.
    turns = samples // 8
    line = np.exp(2j * np.pi * turns * np.arange(samples) / samples) * np.ones((1, 2, 1))
    top = layout.offset_ghz[np.argmax(power_densities(line, layout)[0][0, : layout.frequency_bins])]
    assert top == pytest.approx(-1e3 / (8 * 2.0), abs=spacing[0])


def test_walls_and_durations_of_a_built_contrast() -> None:
    """Domains of known lengths: walls where they were put, durations in the right bins."""
    edges = np.array([100.0, 300.0, 340.0, 700.0])
    inside = np.zeros(512, dtype=bool)
    for start, stop in edges.reshape(2, 2):
        inside |= (GRID.time_ps >= start) & (GRID.time_ps < stop)
    power = np.where(np.stack([inside, ~inside]), 1.0, 0.2)[None]
    contrast = reference.smoothed_contrast(power, 4)
    assert contrast.max() == pytest.approx(0.8 / 1.2)
    assert contrast.min() == pytest.approx(-0.8 / 1.2)
    times = 2.0 * reference.wall_places(contrast)[0]
    np.testing.assert_allclose(np.sort(times), edges, atol=2.0)
    sharp = 2.0 * reference.wall_places(reference.smoothed_contrast(power, 1))[0]
    np.testing.assert_allclose(sharp, edges - 1.0)

    field = np.sqrt(power).astype(complex)
    layout = Layout.of(ENSEMBLE.model_copy(update={"max_lag_ps": 500.0}))
    rows, linear = features(layout, _observed(field, power, np.zeros((1, 3, 5))))
    assert rows[0, layout.in_blocks["walls"]] == 4
    blocks, means = Blocks(layout.block_features), Means(layout.mean_features)
    blocks.add(np.repeat(rows, 3, axis=0))
    means.add(3, 3 * sums_and_squares(linear))
    found = Estimators(layout, blocks, means, 0.0)
    assert found["walls_per_ns"].value[0] == pytest.approx(4 / 1.024)
    assert found["mean_duration_ps"].value[0] == pytest.approx(256.0)
    density = found["durations"].value
    width = 500.0 / DURATION_BINS
    assert density.sum() * width == pytest.approx(1.0)
    expected = {int(d // width) for d in (200.0, 40.0, 360.0, 424.0)}
    assert {int(i) for i in np.flatnonzero(density)} <= {e + s for e in expected for s in (-1, 0)}
    assert found["contrast"].value.sum() * 2 / 50 == pytest.approx(1.0)
    np.testing.assert_allclose(found["powers"].value, 2 * list(power[0].mean(axis=1)))


def _walls(power: np.ndarray, smoothing_ps: float) -> float:
    layout = Layout.of(ENSEMBLE.model_copy(update={"wall_smoothing_ps": smoothing_ps}))
    walls, _, _ = domain_features(power, GRID, layout)
    return float(walls[0, 0])


def test_smoothing_removes_short_wiggles() -> None:
    """A reversal shorter than half the smoothing is no domain; a window wraps around."""
    power = np.stack([np.ones(512), np.full(512, 0.2)])[None]
    power[0, :, 10] = [0.2, 1.0]
    assert _walls(power, 0.0) == 2
    assert _walls(power, 12.0) == 0
    power[0, :, 500:] = [[0.2], [1.0]]
    assert _walls(power, 12.0) == 2


def test_estimates_of_gaussian_light_by_name() -> None:
    """Every name has a value and an error of its own length; correlations are one at their peak."""
    changes = {
        "ensemble.window_ps": 1024.0,
        "ensemble.samples": 512,
        "ensemble.max_lag_ps": 100.0,
        "ensemble.distances": 2,
        "relation.kind": "partial",
        "relation.correlation": 0.4,
    }
    experiment = with_changes(Experiment(), changes)
    field = synthesize(draw(8, range(48), GRID), input_response(experiment, GRID))
    power = np.abs(field) ** 2
    along = np.repeat(moments(power)[:, None], 3, axis=1)
    rows, linear = features(LAYOUT, _observed(field, power, along))
    blocks, means = Blocks(LAYOUT.block_features), Means(LAYOUT.mean_features)
    blocks.add(rows)
    means.add(len(linear), sums_and_squares(linear))
    found = Estimators(LAYOUT, blocks, means, 0.4)
    assert list(found) == list(ESTIMATES)
    for name in ESTIMATES:
        value, error = found[name]
        assert value.shape == error.shape
        assert np.isfinite(value).all(), name
    middle = LAYOUT.lags
    for name in CORRELATIONS[:3]:
        assert found[name].value[middle] == pytest.approx(1.0)
    plain = blocks.estimate(lambda means: central(means[..., 10:15])[..., None])
    assert found["cross"].value[middle] == pytest.approx(plain.value[0], rel=1e-9)
    assert found["cross"].standard_error[middle] == pytest.approx(plain.standard_error[0], rel=1e-6)
    assert abs(plain.value[0] - 0.4) < 4.0 * plain.standard_error[0]
    # Here the light at the end is that of the launch, whose expectation leaves nothing to chance.
    last = last_central(LAYOUT, blocks, 0.4)
    for value, error in (last, (found["distance"].value, found["distance"].standard_error)):
        np.testing.assert_allclose(value, 0.4, rtol=1e-9)
        assert np.all(error < 1e-9)
    moment = found["moment_cross"]
    assert abs(moment.value[0] - 1.4) < 4.0 * moment.standard_error[0]
    before = found["cross"].value.copy()
    blocks.add(rows)
    np.testing.assert_array_equal(
        Estimators(LAYOUT, blocks, means, 0.4)["cross"].value.shape, before.shape
    )
    np.testing.assert_array_equal(found["cross"].value, before)
    with pytest.raises(KeyError):
        found["nonsense"]


def test_a_component_without_light_breaks_nothing() -> None:
    """All power in component 1: its correlations are there, the others are zero, none is NaN."""
    power = np.zeros((6, 2, 512))
    power[:, 0] = np.random.default_rng(1).gamma(1.0, size=(6, 512))
    field = np.sqrt(power).astype(complex)
    along = np.repeat(moments(power)[:, None], 3, axis=1)
    rows, linear = features(LAYOUT, _observed(field, power, along))
    blocks, means = Blocks(LAYOUT.block_features), Means(LAYOUT.mean_features)
    blocks.add(rows)
    means.add(len(linear), sums_and_squares(linear))
    found = Estimators(LAYOUT, blocks, means, 0.0)
    for name in (*CORRELATIONS, "distance", "moment_cross", "durations"):
        assert np.isfinite(found[name].value).all(), name
    assert np.abs(found["distance"].value).max() < 1e-6
