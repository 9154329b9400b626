"""Input relations: ensembles against the Gaussian moment theorem, and known closed forms."""

from typing import Any

import numpy as np
import pytest
from scipy.special import dawsn

from solver.experiment import Experiment, JsonValue, with_changes
from solver.features import raw_correlations
from solver.grid import Grid
from solver.propagation import propagate
from solver.receiver import detect
from solver.relation import input_response
from solver.source import draw, synthesize
from solver.statistics import Blocks, Layout, central
from solver.theory import LinearCorrelations, linear_correlations
from tests import reference
from tests.checks import check

WINDOW_PS, SAMPLES = 4096.0, 1024
GRID = Grid(SAMPLES, WINDOW_PS / SAMPLES)
SIGMA = 2.0 * np.pi * 0.024 / np.sqrt(8.0 * np.log(2.0))
"""rms angular width of the headline source, rad/ps."""


def _experiment(**changes: JsonValue) -> Experiment:
    named = {name.replace("__", "."): value for name, value in changes.items()}
    grid = {"ensemble.window_ps": WINDOW_PS, "ensemble.samples": SAMPLES}
    return with_changes(Experiment(), {**grid, "ensemble.max_lag_ps": 200.0, **named})


def _theory(experiment: Experiment) -> LinearCorrelations:
    return linear_correlations(experiment, GRID)


CASES: dict[str, dict[str, Any]] = {
    "independent": {"relation__kind": "independent"},
    "derivative": {"relation__kind": "derivative"},
    "hilbert": {"relation__kind": "hilbert"},
    "hilbert with a notch": {"relation__kind": "hilbert", "relation__notch_ghz": 6.0},
    "delayed": {"relation__kind": "delayed", "relation__delay_ps": 48.0},
    "partial": {"relation__kind": "partial", "relation__correlation": 0.3},
    "identical": {"relation__kind": "identical"},
    "crosstalk": {"relation__kind": "derivative", "launch__crosstalk_db": -10.0},
    "uneven with skew": {
        "relation__kind": "derivative",
        "launch__share_1": 0.2,
        "launch__skew_ps": 24.0,
        "launch__crosstalk_db": -13.0,
    },
    "receiver": {
        "relation__kind": "derivative",
        "receiver__extinction_db": -12.0,
        "receiver__filter": "bessel4",
        "receiver__bandwidth_ghz": 15.0,
    },
    "super-gaussian": {"relation__kind": "hilbert", "source__shape": "super_gaussian"},
}


@pytest.mark.parametrize("case", CASES)
def test_gaussian_moment_theorem(case: str) -> None:
    """Correlations of drawn light against |Γ_jk|² at every lag (Goodman, Statistical Optics).

    Mean square deviation about one squared standard error (lags share the error of their
    normalization, so it scatters widely), and no lag further off than 5 standard errors.
    """
    experiment = _experiment(**CASES[case])
    layout = Layout.of(experiment.ensemble)
    field = synthesize(draw(36, range(512), GRID), input_response(experiment, GRID))
    seen = detect(field, experiment.receiver, GRID)
    blocks = Blocks(4 * layout.lags + 5)
    raw = raw_correlations(seen, layout)
    blocks.add(np.concatenate([raw, seen.mean(axis=2)], axis=1))

    def curves(means: np.ndarray) -> np.ndarray:
        n = layout.lags
        m1, m2 = means[..., -2, None], means[..., -1, None]
        auto1, auto2 = means[..., : n + 1] - m1**2, means[..., n + 1 : 2 * n + 2] - m2**2
        cross = means[..., 2 * n + 2 : 4 * n + 3] - m1 * m2
        return np.concatenate(
            [
                auto1 / auto1[..., :1],
                auto2 / auto2[..., :1],
                cross / np.sqrt(auto1[..., :1] * auto2[..., :1]),
            ],
            axis=-1,
        )

    value, error = blocks.estimate(curves)
    theory = _theory(experiment)
    half = np.arange(layout.lags + 1)
    signed = np.arange(-layout.lags, layout.lags + 1)
    expected = np.concatenate([theory.auto1[half], theory.auto2[half], theory.cross[signed]])
    sure = error > 1e-9  # lag zero of an autocorrelation is one, with no error
    np.testing.assert_allclose(value[~sure], expected[~sure], atol=1e-9)
    pull = (value[sure] - expected[sure]) / error[sure]
    check(
        "input relations: correlations of drawn light at every lag",
        "Gaussian moment theorem; Goodman, Statistical Optics",
        np.abs(pull).max(),
        5.0,
        "σ",
    )
    assert np.mean(pull**2) < 2.5


def test_derivative() -> None:
    """C12(τ) = (στ)² e^{−(στ)²}: zero at the centre, lobes of 1/e at τ = ±1/σ."""
    lags = GRID.time_ps[:100]
    cross = _theory(_experiment(relation__kind="derivative")).cross
    x2 = (SIGMA * lags) ** 2
    check(
        "derivative relation: C12(τ)",
        "(στ)² e^{−(στ)²} of a Gaussian spectrum, own derivation",
        np.abs(cross[:100] - x2 * np.exp(-x2)).max(),
        1e-12,
    )
    np.testing.assert_allclose(cross[-99:][::-1], cross[1:100], atol=1e-12)
    assert cross[0] == pytest.approx(0.0, abs=1e-15)
    fine = Grid(16384, 4096.0 / 16384)
    curve = linear_correlations(_experiment(relation__kind="derivative"), fine).cross[:400]
    top = int(np.argmax(curve))
    assert fine.time_ps[top] == pytest.approx(1.0 / SIGMA, abs=fine.time_step_ps)
    assert curve[top] == pytest.approx(np.exp(-1.0), rel=1e-3)


def test_hilbert() -> None:
    """C12(τ) = [(2/√π) Dawson(στ/√2)]² for an ideal sign step and a Gaussian spectrum.

    The step falls between bins, so a wide window is taken and the agreement is that of a sum
    with an integral.
    """
    wide = Grid(32768, 4.0)
    theory = linear_correlations(_experiment(relation__kind="hilbert"), wide).cross
    lags = wide.time_ps[:60]
    closed = (2.0 / np.sqrt(np.pi) * dawsn(SIGMA * lags / np.sqrt(2.0))) ** 2
    check(
        "sign-step relation: C12(τ)",
        "[(2/√π) Dawson(στ/√2)]² of a Gaussian spectrum, own derivation",
        np.abs(theory[:60] - closed).max(),
        2e-3,
    )
    assert theory[0] == pytest.approx(0.0, abs=1e-12)


def test_hilbert_notch_blocks_the_carrier() -> None:
    """Half the notch on either side of the carrier is dark in component 2."""
    response = input_response(_experiment(relation__kind="hilbert", relation__notch_ghz=8.0), GRID)
    dark = np.abs(GRID.frequency_thz) < 4e-3
    assert not response[1][:, dark].any()
    assert response[1][0, np.abs(GRID.frequency_thz) < 8e-3].any()


def test_delayed_partial_identical_independent() -> None:
    """Peak of one at Δ; ρ; one; nothing at all."""
    delayed = _theory(_experiment(relation__kind="delayed", relation__delay_ps=48.0)).cross
    assert delayed[12] == pytest.approx(1.0, abs=1e-12)
    assert int(np.argmax(delayed)) == 12
    for rho in (0.0, 0.3, 1.0):
        partial = _theory(_experiment(relation__kind="partial", relation__correlation=rho))
        assert partial.cross[0] == pytest.approx(rho, abs=1e-12)
        assert partial.moment_cross == pytest.approx(1.0 + rho, abs=1e-12)
    identical = _theory(_experiment(relation__kind="identical"))
    np.testing.assert_allclose(identical.cross, identical.auto1, atol=1e-12)
    assert np.abs(_theory(_experiment(relation__kind="independent")).cross).max() < 1e-15


def test_autocorrelation_of_a_gaussian_spectrum() -> None:
    """|γ(τ)|² = e^{−(στ)²}."""
    auto = _theory(_experiment()).auto1[:100]
    check(
        "Gaussian spectrum: autocorrelation of the intensity",
        "e^{−(στ)²}; Goodman, Statistical Optics",
        np.abs(auto - np.exp(-((SIGMA * GRID.time_ps[:100]) ** 2))).max(),
        1e-12,
    )


def test_skew_moves_and_crosstalk_mixes() -> None:
    """Skew is a delay of component 2; crosstalk moves the stated share of the power."""
    skewed = _theory(_experiment(relation__kind="identical", launch__skew_ps=-24.0)).cross
    assert int(np.argmax(skewed)) == SAMPLES - 6
    lone = _experiment(launch__share_1=1.0, launch__crosstalk_db=-20.0)
    power = np.sum(np.abs(input_response(lone, GRID)) ** 2, axis=(1, 2))
    np.testing.assert_allclose(power, [0.2 * 0.99, 0.2 * 0.01], rtol=1e-12)
    # Independent components of one power mixed by a rotation stay independent.
    mixed = _theory(_experiment(launch__crosstalk_db=-6.0)).cross
    assert np.abs(mixed).max() < 1e-15


def test_dispersion_changes_the_waveform_and_nothing_else() -> None:
    """Common practice: a purely dispersive line leaves spectrum and correlations alone."""
    experiment = _experiment(relation__kind="derivative", line__0__gamma_per_w_km=0.0)
    long = with_changes(experiment, {"line.0.length_km": 60.0, "line.0.loss_db_per_km": 0.0})
    before, after = linear_correlations(experiment, GRID), linear_correlations(long, GRID)
    for name in ("auto1", "auto2", "sum", "cross"):
        np.testing.assert_allclose(getattr(before, name), getattr(after, name), atol=1e-12)
    field = synthesize(draw(2, range(64), GRID), input_response(long, GRID))
    out = propagate(
        field, time_step_ps=GRID.time_step_ps, line=list(long.line), tolerance=1e-6
    ).field
    spectra = [np.abs(np.fft.fft(x)) ** 2 for x in (field, out)]
    np.testing.assert_allclose(spectra[1], spectra[0], atol=1e-11 * spectra[0].max())
    assert reference.relative_l2(out, field) > 1.0
    layout = Layout.of(long.ensemble)
    power = [np.abs(x) ** 2 for x in (field, out)]
    rows = [raw_correlations(x, layout) for x in power]
    change = (rows[1] - rows[0]) / power[0].mean() ** 2
    error = change.std(axis=0) / np.sqrt(len(change))
    check(
        "dispersion alone changes no correlation",
        "common practice",
        np.abs(change.mean(axis=0) / error).max(),
        5.0,
        "σ",
    )
    dips = [float(central(reference.intensity_moments(x).mean(axis=0))) for x in (field, out)]
    assert abs(dips[1] - dips[0]) < 0.06


def test_walk_off_moves_the_peak() -> None:
    """A group-delay difference δ delays component 1, so C12 peaks at τ = −δL."""
    experiment = _experiment(
        relation__kind="identical", line__0__coupling="uncoupled", line__0__delay_ps_per_km=4.0
    )
    cross = _theory(experiment).cross
    assert int(np.argmax(cross)) == SAMPLES - 8
    assert cross[-8] == pytest.approx(1.0, abs=1e-12)
