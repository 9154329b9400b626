"""A shaper that is not ideal, and measured light, against closed forms and drawn ensembles."""

from typing import Any

import numpy as np
import pytest
from pydantic import ValidationError
from scipy.integrate import quad
from scipy.special import erf

from solver.experiment import (
    Amplifier,
    Contradiction,
    Experiment,
    JsonValue,
    MeasuredSpectrum,
    Relation,
    Shaper,
    Source,
    with_changes,
)
from solver.grid import Grid
from solver.relation import input_response, relation_response, shaped_response
from solver.source import draw, power_spectrum, synthesize
from solver.theory import linear_correlations, mutual_coherence
from tests.checks import check

GRID = Grid(8192, 1.0)
BIN_GHZ = 1e3 / GRID.window_ps
GHZ = 1e3 * GRID.frequency_thz
WIDTH_GHZ = 24.0
NEAR = np.abs(GHZ) < 3.0 * WIDTH_GHZ
"""Far from the ends of the band, where a periodic spectrum meets its own other end."""
LIT = power_spectrum(Source(width_ghz=WIDTH_GHZ), GRID) > 1e-4 / GRID.samples
RMS = 1.0 / np.sqrt(8.0 * np.log(2.0))
"""rms over full width at half maximum of a Gaussian."""


def _shaped(relation: dict[str, Any], **shaper: float) -> np.ndarray:
    """Response of component 2 to its first draw."""
    wanted = relation_response(Relation(**relation), GRID)
    return shaped_response(wanted, Shaper(**shaper), LIT, GRID)[1, 0]


def _experiment(changes: dict[str, JsonValue]) -> Experiment:
    window: dict[str, JsonValue] = {"ensemble.window_ps": 8192.0, "ensemble.samples": 8192}
    return with_changes(Experiment(), {**window, "line.0.gamma_per_w_km": 0.0, **changes})


def test_an_ideal_shaper_changes_nothing() -> None:
    for kind in ("derivative", "hilbert", "delayed", "independent", "partial", "identical"):
        wanted = relation_response(Relation(kind=kind), GRID)
        np.testing.assert_array_equal(shaped_response(wanted, Shaper(), LIT, GRID), wanted)


@pytest.mark.parametrize("resolution", [4.0, 12.0])
@pytest.mark.parametrize("delay", [-60.0, 25.0])
def test_delays_are_windowed_by_the_resolution(resolution: float, delay: float) -> None:
    """e^{−iωΔ} smoothed by a Gaussian of rms s: its amplitude falls by exp(−(2πsΔ)²/2)."""
    made = _shaped({"kind": "delayed", "delay_ps": delay}, resolution_ghz=resolution)
    falls = np.exp(-0.5 * (2e-3 * np.pi * resolution * RMS * delay) ** 2)
    expected = falls * np.exp(-1j * GRID.omega * delay)
    source = "e^{−iωΔ} exp(−(2πsΔ)²/2), the transform of a Gaussian"
    check("delays windowed by a resolution", source, np.abs(made - expected).max(), 1e-12)


@pytest.mark.parametrize("resolution", [5.0, 20.0])
def test_a_smoothed_sign_step_is_an_error_function(resolution: float) -> None:
    """−i sgn f becomes −i erf(f/(s√2)); a sum over bins differs from it by h² g′/6 at most."""
    made = _shaped({"kind": "hilbert"}, resolution_ghz=resolution)
    rms = resolution * RMS
    expected = -1j * erf(GHZ / (rms * np.sqrt(2.0)))
    error = BIN_GHZ**2 / 6.0 * np.exp(-0.5) / (np.sqrt(2.0 * np.pi) * rms**2)
    away = np.abs(made - expected)[NEAR].max() / error
    check("smoothed sign step, in errors of a sum over bins", "−i erf(f/(s√2))", away, 1.1)


def test_a_smoothed_notch_is_a_difference_of_error_functions() -> None:
    """Edges midway between bins, where a sum is nearest to the integral."""
    notch, rms = 2.0 * 40.5 * BIN_GHZ, 6.0 * RMS
    relation = {"kind": "hilbert", "notch_ghz": notch}
    made = _shaped(relation, resolution_ghz=6.0)
    edges = (GHZ - notch / 2, GHZ + notch / 2)
    expected = -0.5j * sum(erf(edge / (rms * np.sqrt(2.0))) for edge in edges)
    error = BIN_GHZ**2 / 12.0 * np.exp(-0.5) / (np.sqrt(2.0 * np.pi) * rms**2)
    away = np.abs(made - expected)[NEAR].max() / error
    check("smoothed notch, in errors of a sum over bins", "two error functions", away, 1.1)
    sharp = _shaped(relation)
    np.testing.assert_array_equal(sharp == 0.0, np.abs(GHZ) < notch / 2)


def _mean_distance(x: np.ndarray, rms: float) -> np.ndarray:
    """E|x + X| for a normal X of that rms."""
    return x * erf(x / (rms * np.sqrt(2.0))) + rms * np.sqrt(2.0 / np.pi) * np.exp(
        -0.5 * (x / rms) ** 2
    )


@pytest.mark.parametrize(("end", "resolution"), [(10.0, 6.0), (20.0, 4.0), (15.0, 30.0)])
def test_a_smoothed_slope_of_finite_range(end: float, resolution: float) -> None:
    """clip(ω, ±E) = (|ω + E| − |ω − E|)/2, smoothed term by term; the corners cost h²/12 g."""
    made = _shaped({"kind": "derivative", "range_ghz": end}, resolution_ghz=resolution)
    rms = resolution * RMS
    smooth = (_mean_distance(GHZ + end, rms) - _mean_distance(GHZ - end, rms)) / 2.0
    expected = 2e-3j * np.pi * smooth
    error = 2e-3 * np.pi * BIN_GHZ**2 / 8.0 * 2.0 / (np.sqrt(2.0 * np.pi) * rms)
    away = np.abs(made - expected)[NEAR].max() / error
    check("smoothed slope of finite range, likewise", "four error functions", away, 1.0)


def test_a_slope_keeps_through_any_resolution() -> None:
    """A straight line smoothed by something even is itself."""
    made = _shaped({"kind": "derivative"}, resolution_ghz=10.0)
    near = np.abs(GHZ) < 2.0 * WIDTH_GHZ
    np.testing.assert_allclose(made[near], 1j * GRID.omega[near], atol=1e-9)


@pytest.mark.parametrize("extinction", [-20.0, -35.0])
def test_extinction_is_the_least_that_passes(extinction: float) -> None:
    """In the notch and on the slope, below the highest where the source is lit; phase kept."""
    leak = 10.0 ** (extinction / 20.0)
    notched = _shaped({"kind": "hilbert", "notch_ghz": 10.0}, extinction_db=extinction)
    dark = np.abs(GHZ) < 5.0
    np.testing.assert_allclose(np.abs(notched), np.where(dark, leak, 1.0), rtol=1e-12)
    off = GHZ != 0.0
    np.testing.assert_allclose(notched[off] / np.abs(notched[off]), -1j * np.sign(GHZ[off]))
    slope = _shaped({"kind": "derivative"}, extinction_db=extinction)
    omega = GRID.omega
    highest = np.abs(omega[LIT]).max()
    np.testing.assert_allclose(np.abs(slope), np.maximum(np.abs(omega), leak * highest))
    np.testing.assert_allclose(slope[off] / np.abs(slope[off]), 1j * np.sign(omega[off]))


@pytest.mark.parametrize("end", [6.0, 12.0, 40.0])
def test_correlation_of_a_slope_of_finite_range(end: float) -> None:
    """Γ12(τ) = ∫S H e^{iωτ} by adaptive quadrature, for the light of a Gaussian source.

    A sum over bins h apart misses a corner by h²/12 of its change of slope: 1e-6 here.
    """
    experiment = _experiment(
        {"relation.kind": "derivative", "relation.range_ghz": end, "source.width_ghz": WIDTH_GHZ}
    )
    sigma = 2e-3 * np.pi * WIDTH_GHZ * RMS
    edge = 2e-3 * np.pi * end

    def density(omega: float) -> float:
        return float(np.exp(-0.5 * (omega / sigma) ** 2))

    def clipped(omega: float) -> float:
        return min(omega, edge)

    reach = (0.0, 9.0 * sigma)
    options: dict[str, Any] = {"points": [edge], "limit": 200, "epsabs": 1e-13}
    power = (
        quad(density, *reach)[0]
        * quad(lambda w: density(w) * clipped(w) ** 2, *reach, **options)[0]
    )
    cross = linear_correlations(experiment, GRID).cross
    for lag in (0, 4, 11, 25, 60):
        odd = quad(lambda w, t=lag: density(w) * clipped(w) * np.sin(w * t), *reach, **options)[0]
        source = "∫S H e^{iωτ} dω by adaptive quadrature (Goodman, Statistical Optics)"
        away = abs(cross[lag] - odd**2 / power)
        check("C12(τ) of a derivative filter of finite range", source, away, 3e-6)
        assert cross[-lag] == pytest.approx(cross[lag], abs=1e-12)


def _triangle(half_bins: int, carrier_bins: int = 0) -> MeasuredSpectrum:
    """A triangle over bins of the grid, its top so far above the carrier."""
    places = (carrier_bins - half_bins, carrier_bins, carrier_bins + half_bins)
    return MeasuredSpectrum(
        offset_ghz=tuple(place * BIN_GHZ for place in places), density=(0.0, 2.0, 0.0)
    )


def _measured(spectrum: MeasuredSpectrum, changes: dict[str, JsonValue]) -> Experiment:
    source = {"source.shape": "measured", "source.measured": spectrum.model_dump(mode="json")}
    return _experiment({**source, **changes})


def test_autocorrelation_is_the_transform_of_a_measured_spectrum() -> None:
    """A triangle of half-width w: |γ(τ)|² = sinc⁴(wτ) (Wiener and Khintchine).

    Over bins the sum is Fejér's, [sin(πnτ/T)/(n sin(πτ/T))]⁴ for n bins, and nears it as n falls
    short of the window's.
    """
    half = 200
    auto = linear_correlations(_measured(_triangle(half), {}), GRID).auto1[:400]
    lag = GRID.time_ps[1:400]
    exact = np.sin(np.pi * half * lag / GRID.window_ps) / (
        half * np.sin(np.pi * lag / GRID.window_ps)
    )
    source = "Fejér's sum for a triangle (Wiener and Khintchine)"
    away = np.abs(auto[1:] - exact**4).max()
    check("autocorrelation of light with a measured spectrum", source, away, 1e-12)
    np.testing.assert_allclose(auto, np.sinc(1e-3 * half * BIN_GHZ * GRID.time_ps[:400]) ** 4,
                               atol=2e-2)  # fmt: skip


def test_light_above_the_carrier_turns_as_it_should() -> None:
    """An optical frequency f above the carrier e^{−iω0 t} turns the field by e^{−2πift}."""
    experiment = _measured(_triangle(40, 100), {})
    coherence = mutual_coherence(input_response(experiment, GRID))[0, 0]
    lags = GRID.time_ps[:60]
    expected = np.exp(-2e-3j * np.pi * 100 * BIN_GHZ * lags)
    np.testing.assert_allclose(coherence[:60] / np.abs(coherence[:60]), expected, atol=1e-9)


def test_drawn_light_has_the_measured_spectrum() -> None:
    """Mean periodogram of 400 realizations, per bin within 5 of its standard errors."""
    lopsided = MeasuredSpectrum(
        offset_ghz=(-40.0, -30.0, -10.0, 0.0, 25.0, 30.0), density=(0.0, 0.2, 1.0, 0.3, 0.5, 0.0)
    )
    grid = Grid(1024, 2.0)
    changes: dict[str, JsonValue] = {"ensemble.window_ps": 2048.0, "ensemble.samples": 1024}
    experiment = _measured(lopsided, changes)
    field = synthesize(draw(11, range(400), grid), input_response(experiment, grid))
    seen = np.mean(np.abs(np.fft.fft(field[:, 0]) / grid.samples) ** 2, axis=0)
    drawn = grid.by_offset(seen)
    expected = np.interp(grid.offset_ghz, lopsided.offset_ghz, lopsided.density, 0.0, 0.0)
    expected *= 0.1 / expected.sum()
    lit = expected > 0.0
    # A periodogram bin of Gaussian light scatters by as much as it is.
    pull = (drawn[lit] / expected[lit] - 1.0) * np.sqrt(400)
    source = "exponential scatter of a periodogram (Goodman, Statistical Optics)"
    check("spectrum of drawn measured light", source, np.abs(pull).max(), 5.0, "σ")
    assert abs(pull.mean()) < 5.0 / np.sqrt(pull.size)
    assert np.all(drawn[~lit] < 1e-25)


CASES: dict[str, dict[str, JsonValue]] = {
    "derivative, short range": {
        "relation.kind": "derivative", "relation.range_ghz": 10.0, "shaper.resolution_ghz": 6.0
    },
    "derivative, poor extinction": {
        "relation.kind": "derivative", "shaper.extinction_db": -12.0
    },
    "hilbert, notch, resolution, extinction": {
        "relation.kind": "hilbert", "relation.notch_ghz": 8.0, "shaper.resolution_ghz": 5.0,
        "shaper.extinction_db": -15.0,
    },
    "delayed, resolution": {
        "relation.kind": "delayed", "relation.delay_ps": 40.0, "shaper.resolution_ghz": 8.0
    },
    "polarization-dependent loss, crosstalk, skew": {
        "relation.kind": "hilbert", "launch.pdl_db": 4.0, "launch.crosstalk_db": -10.0,
        "launch.skew_ps": 12.0,
    },
}  # fmt: skip


@pytest.mark.parametrize("measured", [False, True])
@pytest.mark.parametrize("case", CASES)
def test_ensembles_follow_the_closed_forms(case: str, measured: bool) -> None:
    """⟨δI1(t) δI2(t+τ)⟩ = |Γ12(τ)|² with known means, for shaped light of either source.

    Every lag within 5 standard errors over realizations, their mean square below 2.
    """
    grid = Grid(2048, 4.0)
    changes: dict[str, JsonValue] = {"ensemble.samples": 2048, **CASES[case]}
    lopsided = MeasuredSpectrum(
        offset_ghz=(-40.0, -20.0, 0.0, 8.0, 30.0), density=(0.0, 1.0, 0.4, 0.8, 0.0)
    )
    experiment = _measured(lopsided, changes) if measured else _experiment(changes)
    response = input_response(experiment, grid)
    field = synthesize(draw(5, range(300), grid), response)
    mean = np.sum(np.abs(response) ** 2, axis=(1, 2))
    spectra = np.fft.fft(np.abs(field) ** 2 - mean[:, None])
    cross = np.fft.ifft(spectra[:, 0].conj() * spectra[:, 1]).real / grid.samples
    lags = np.r_[0:40, -40:0]
    expected = (np.abs(mutual_coherence(response)[0, 1]) ** 2)[lags]
    error = cross.std(axis=0, ddof=1)[lags] / np.sqrt(len(cross))
    pull = (cross.mean(axis=0)[lags] - expected) / error
    source = "Gaussian moment theorem (Goodman, Statistical Optics, ch. 3)"
    check("cross-correlation of shaped light", source, np.abs(pull).max(), 5.0, "σ")
    assert np.mean(pull**2) < 2.0
    theory = linear_correlations(experiment, grid)
    np.testing.assert_allclose(
        theory.cross[lags] * mean[0] * mean[1], expected, atol=1e-9 * mean[0] * mean[1]
    )


def _refused(changes: dict[str, JsonValue]) -> Contradiction:
    with pytest.raises(ValidationError) as caught:
        with_changes(Experiment(), changes)
    error = caught.value.errors()[0]["ctx"]["error"]
    assert isinstance(error, Contradiction)
    return error


@pytest.mark.parametrize(
    ("shape", "notch", "widest"),
    [("gaussian", 24.5, "24 GHz"), ("rectangular", 24.0, "21.6 GHz"), ("sech2", 40.0, "24 GHz")],
)
def test_a_notch_wider_than_the_source_is_refused(shape: str, notch: float, widest: str) -> None:
    """The widest that leaves light is offered, and is accepted."""
    changes: dict[str, JsonValue] = {"source.shape": shape, "relation.kind": "hilbert"}
    error = _refused({**changes, "relation.notch_ghz": notch})
    assert error.where == "relation.notch_ghz"
    assert f"use at most {widest}" in str(error)
    accepted = float(widest.split()[0])
    with_changes(Experiment(), {**changes, "relation.notch_ghz": accepted})


def test_a_notch_in_measured_light_is_held_against_its_power() -> None:
    """Two lines 100 GHz apart leave room for one of any width between them."""
    lines = MeasuredSpectrum(
        offset_ghz=(-54.0, -50.0, -46.0, 46.0, 50.0, 54.0), density=(0.0, 1.0, 0.0, 0.0, 1.0, 0.0)
    )
    made = _measured(lines, {"relation.kind": "hilbert", "relation.notch_ghz": 90.0})
    response = input_response(made, Grid(8192, 1.0))
    assert np.isfinite(response).all()
    error = _refused({
        "source.shape": "measured", "source.measured": lines.model_dump(mode="json"),
        "relation.kind": "hilbert", "relation.notch_ghz": 120.0,
    })  # fmt: skip
    assert "use at most 100 GHz" in str(error)


@pytest.mark.parametrize(
    ("changes", "where", "said"),
    [
        ({"relation.kind": "delayed", "relation.delay_ps": 5000.0}, "relation.delay_ps",
         "5000 ps apart at the launch, more than half the window: use a window of 10000 ps"),
        ({"launch.skew_ps": -4200.0}, "launch.skew_ps", "at most 4096 ps between them"),
        ({"relation.kind": "delayed", "relation.delay_ps": 200.0, "shaper.resolution_ghz": 10.0},
         "shaper.resolution_ghz", "resolution of 5.68 GHz or less, or a delay of at most 113 ps"),
        ({"booster.saturation_mw": 10.0, "booster.gain_db": 2.0}, "gain_db", "use 3.1 dB or more"),
    ],
)  # fmt: skip
def test_impossible_light_is_refused(changes: dict[str, JsonValue], where: str, said: str) -> None:
    """What is wrong, and the nearest that is not."""
    error = _refused(changes)
    assert error.where == where
    assert said in str(error)


def test_the_offered_delay_and_resolution_are_accepted() -> None:
    delayed: dict[str, JsonValue] = {"relation.kind": "delayed", "relation.delay_ps": 200.0}
    with_changes(Experiment(), {**delayed, "shaper.resolution_ghz": 5.68})
    with_changes(
        Experiment(), {**delayed, "relation.delay_ps": 113.0, "shaper.resolution_ghz": 10.0}
    )
    Amplifier(saturation_mw=10.0, gain_db=3.1)


def test_widths_of_measured_spectra() -> None:
    """A finely measured Gaussian has its own width, by coherence time and by power within."""
    offset = np.linspace(-60.0, 60.0, 481)
    density = np.exp(-4.0 * np.log(2.0) * (offset / WIDTH_GHZ) ** 2)
    fine = MeasuredSpectrum(offset_ghz=tuple(offset), density=tuple(density))
    assert fine.width_ghz == pytest.approx(WIDTH_GHZ, rel=1e-3)
    # 99 % within 2.576 rms widths.
    assert fine.half_band_ghz(0.99) == pytest.approx(2.576 * WIDTH_GHZ * RMS, abs=0.26)
    assert fine.span_ghz == 60.0
