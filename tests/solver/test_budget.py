"""The error budget in words, and the grid chosen from an experiment."""

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from solver.budget import (
    Check,
    Errors,
    GridUse,
    budget,
    checks,
    coherence_ps,
    flagged,
    longest_ps,
)
from solver.experiment import Experiment, Study, with_changes
from solver.extent import BAND_IN_RMS, broadened_ghz, spread_ps, suggest
from solver.grid import Grid
from solver.passage import Passage
from solver.propagation import propagate
from solver.result import PointResult, read_result, write_result
from solver.sending import Source
from solver.source import power_spectrum
from solver.study import StudyState, execute
from tests.checks import check

USE = GridUse(
    window_ps=8192.0,
    samples_asked=4096,
    longest_lag_ps=400.0,
    target=0.01,
    most=256,
    spread_ps=300.0,
    edge_share=1e-7,
    edge_limit=1e-6,
)
FINE = checks(USE, 4096, 30.0, 200.0)


def _budget(standard: float, steps: float, made: list[Check] = FINE, **more: Any) -> dict[str, Any]:
    errors = {"realizations": 64, "final": True, **more}
    return budget(USE, Errors(standard, steps, **errors), made)


def test_the_larger_error_is_named() -> None:
    """Statistics or steps, whichever is larger; nothing before there is an error bar."""
    assert _budget(0.01, 0.001)["limited_by"] == "statistics"
    assert _budget(0.001, 0.01)["limited_by"] == "steps"
    assert _budget(math.nan, 0.01)["limited_by"] == ""
    assert "Too early" in _budget(math.nan, 0.01)["verdict"]


def test_the_verdict_says_what_would_help() -> None:
    """Four times the realizations halve a bar; a target takes (bar/target)² times as many."""
    met = _budget(0.01, 0.0)["verdict"]
    assert "4 times more realizations, 256, for half the bar" in met
    assert "is met" in met
    assert "would take about 576" in _budget(0.03, 0.0)["verdict"]
    assert "256 or so in all" in _budget(0.03, 0.0, final=False)["verdict"]
    assert "Steps come next" in _budget(0.01, 0.006)["verdict"]
    assert "standard error of 0.05 or less" in _budget(0.001, 0.01)["verdict"]


@pytest.mark.parametrize(
    ("changes", "samples", "coherence", "longest", "title", "advice"),
    [
        ({"edge_share": 1e-5}, 4096, 30.0, 200.0, "energy at the edges", "8192 samples"),
        ({}, 4096, 3.0, 200.0, "coherence time", "8192 samples"),
        ({}, 4096, 30.0, 3000.0, "longest domain", "1.2e+04 ps"),
        ({"spread_ps": 9000.0}, 4096, 30.0, 200.0, "spread", "9e+03 ps"),
    ],
)
def test_a_grid_that_fails_outranks_both_errors(
    changes: dict[str, float],
    samples: int,
    coherence: float,
    longest: float,
    title: str,
    advice: str,
) -> None:
    """Neither error bar knows of it, so it is named first, with what to do."""
    use = GridUse(**{**vars(USE), **changes})
    made = checks(use, samples, coherence, longest)
    failed = [check for check in made if not check.ok]
    assert len(failed) == 1
    assert title in failed[0].title
    found = _budget(0.01, 0.0, made)
    assert found["limited_by"] == "grid"
    assert advice in found["verdict"]


def test_more_samples_than_asked_for_are_told_but_no_fault() -> None:
    """The grid followed the light; the axes did not."""
    grown = next(c for c in checks(USE, 8192, 30.0, 200.0) if "asked" in c.title)
    assert grown.ok
    assert "8192" in grown.advice
    assert all(not check.advice for check in FINE)


def test_coherence_time_of_gaussian_light() -> None:
    """√(2 ln2/π)/FWHM for a Gaussian spectrum (Goodman, Statistical Optics, table of ch. 5),
    known and estimated from a few realizations."""
    grid = Grid(4096, 2.0)
    exact = power_spectrum(Source(width_ghz=24.0), grid)
    expected = 1e3 * math.sqrt(2.0 * math.log(2.0) / math.pi) / 24.0
    bin_ghz = 1e3 / grid.window_ps
    check(
        "coherence time of a Gaussian spectrum",
        "√(2 ln 2/π)/FWHM; Goodman, Statistical Optics, ch. 5",
        abs(coherence_ps([exact], bin_ghz, math.inf) / expected - 1.0),
        1e-6,
    )
    stream = np.random.default_rng(4)
    seen = np.mean([exact * stream.exponential(size=4096) for _ in range(8)], axis=0)
    # Its rms error: ⟨S⁴⟩-type fluctuations over some 300 lit bins.
    assert coherence_ps([seen], bin_ghz, 8.0) == pytest.approx(expected, rel=0.1)


def test_longest_domain() -> None:
    """The top of the last bin that holds one."""
    assert longest_ps(np.array([1.0, 0.5, 0.0]), 8.0) == 16.0
    assert math.isnan(longest_ps(np.zeros(3), 8.0))


def test_flags_say_why_and_what_to_do() -> None:
    """A point without a value has a verdict too."""
    found = flagged("aliased", "use at least 8192 samples in the same window")
    assert found["limited_by"] == "grid"
    assert found["verdict"].startswith("Flagged")
    assert found["verdict"].endswith("Use at least 8192 samples in the same window.")
    point = PointResult(0, 0, 0, False, True, "tolerance_not_met", "lower the power")
    assert point.summary()["limited_by"] == "steps"
    assert "Lower the power." in point.detail()["budget"]["verdict"]


def test_a_study_carries_its_budget(tmp_path: Path) -> None:
    """Computed, summed up, written and read."""
    study = Study.model_validate(
        {
            "experiment": {
                "line": [{"length_km": 3.0, "beta2_ps2_per_km": 17.0, "gamma_per_w_km": 2.5}],
                "ensemble": {
                    "window_ps": 1024.0,
                    "samples": 512,
                    "min_realizations": 16,
                    "max_realizations": 16,
                    "standard_error_target": 0.02,
                    "distances": 2,
                    "max_lag_ps": 100.0,
                },
            },
            "sweep": {"start": 100.0, "points": 1},
            "variants": [{"name": "a"}],
        }
    )
    state = StudyState(study)
    waiting = state.ready()
    while waiting:
        task = waiting.pop(0)
        waiting += state.absorb(task, execute(task))
    point = state.point(0, 0)
    assert point is not None
    found = point.detail()["budget"]
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    assert found["limited_by"] == point.summary()["limited_by"] == "statistics"
    assert found["standard_error"] > found["discretization_error"] > 0.0
    assert len(found["checks"]) == 5
    assert all(check["ok"] for check in found["checks"])
    path = tmp_path / "a.h5"
    write_result(path, state.result(), title="", created="")
    again = read_result(path).points[0][0]
    assert again is not None
    assert again.detail() == point.detail()
    kept = state.checkpoint(0, 0)
    assert kept is not None
    restored = StudyState(study)
    restored.restore(0, 0, kept)
    assert restored.point(0, 0).detail() == point.detail()  # type: ignore[union-attr]


def test_spread_is_what_a_pulse_suffers() -> None:
    """Arrival times at ±Ω after dispersion, from the phase that propagate() gives them."""
    line = [{"length_km": 5.0, "beta2_ps2_per_km": 20.0, "beta3_ps3_per_km": 0.3}]
    path = Experiment.model_validate({"line": line})
    grid = Grid(1024, 2.0)
    reach = 2 * math.pi * 0.06
    bins = round(0.06 * grid.window_ps)
    spectrum = np.zeros((1, 2, 1024), dtype=complex)
    spectrum[0, 0, [bins - 1, bins + 1, -bins - 1, -bins + 1, 0]] = 1.0
    out = propagate(np.fft.ifft(spectrum), time_step_ps=2.0, line=path.line)
    phase = np.angle(np.fft.fft(out.field)[0, 0])
    step = 2 * math.pi / grid.window_ps
    slopes = []
    for at in (bins, -bins):
        turned = np.angle(np.exp(1j * (phase[at + 1] - phase[at - 1]))) / (2 * step)
        # Phases tell a slope up to a whole turn over two bins.
        around = path.line[0].beta2(1552.0) * 5.0 * at / abs(at) * reach
        turns = np.round((around - turned) * step / math.pi)
        slopes.append(turned + turns * math.pi / step)
    measured = abs(slopes[0] - slopes[1])
    assert 0.98 * measured <= spread_ps(path, 60.0) <= 1.2 * measured


def test_broadening_is_not_underestimated() -> None:
    """Rms width of thermal light after the line of the headline, at powers up to its last."""
    for power_mw in (50.0, 200.0, 800.0):
        changes = {
            "launch.total_power_mw": power_mw,
            "ensemble.window_ps": 2048.0,
            "ensemble.samples": 2048,
        }
        experiment = with_changes(Experiment(), changes)
        passage = Passage(experiment, 1)
        trip = passage.travel(passage.fields(range(2)), passage.evenly(2048, 400))
        assert trip.outcome.kind == "completed"
        out = trip.field
        density = np.abs(np.fft.fft(out)) ** 2
        offset = 1e3 * np.fft.fftfreq(out.shape[2], 2048.0 / out.shape[2])
        rms = math.sqrt(float((density * offset**2).sum() / density.sum()))
        beyond = float(density[..., np.abs(offset) > BAND_IN_RMS * broadened_ghz(experiment)].sum())
        assert 0.8 * rms < broadened_ghz(experiment) < 3.0 * rms
        assert beyond < 1e-4 * density.sum()


def _automatic(**changes: Any) -> Study:
    ensemble = {"grid": "automatic", **changes.pop("ensemble", {})}
    only = {"variants": [{"name": "a"}]} if changes else {}
    return Study.model_validate({"experiment": {"ensemble": ensemble, **changes}, **only})


def test_a_chosen_grid_is_shown_and_kept() -> None:
    """Whatever was given; the study says what it is, and is the same when read again."""
    study = _automatic(ensemble={"window_ps": 64.0, "samples": 256})
    ensemble = study.experiment.ensemble
    chosen = study.suggestion()
    assert (ensemble.window_ps, ensemble.samples) == (chosen.window_ps, chosen.samples)
    assert study == Study.model_validate_json(study.model_dump_json())
    assert study.identity == _automatic().identity
    assert study.identity != Study().identity
    assert study.experiment_at(0, 0).ensemble.grid == "given"
    # The headline's own grid, or the next finer one: they were chosen by hand.
    assert ensemble.window_ps == Study().experiment.ensemble.window_ps
    assert ensemble.samples in (4096, 8192)


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"source": {"width_ghz": 2.0}}, "coherence times of the source"),
        ({"source": {"width_ghz": 300.0}}, "spectrum broadened by the Kerr effect"),
        ({"relation": {"kind": "delayed", "delay_ps": 20_000.0}}, "longest delay and lag"),
        ({"relation": {"kind": "hilbert", "notch_ghz": 0.5}}, "notch of the sign step"),
        ({"shaper": {"resolution_ghz": 0.1}}, "resolution of the shaper"),
        ({"receiver": {"filter": "bessel4", "bandwidth_ghz": 0.5}}, "memory of the receiver"),
        ({"receiver": {"filter": "bessel4", "bandwidth_ghz": 800.0}}, "bandwidth of the receiver"),
        (
            {"preamplifier": {"noise_figure_db": 5.0, "bandpass_ghz": 900.0}},
            "band-pass of the preamplifier",
        ),
        (
            {"line": [{"length_km": 400.0, "beta2_ps2_per_km": 17.0, "gamma_per_w_km": 1.0}]},
            "spread by the line",
        ),
    ],
)
def test_each_effect_can_decide(changes: dict[str, Any], reason: str) -> None:
    """And the grid chosen then passes every check of a given one."""
    study = _automatic(**changes)
    needs = study.suggestion().needs
    largest = [max((n for n in needs if n.unit == u), key=lambda n: n.value) for u in ("ps", "GHz")]
    assert reason in [need.title for need in largest]
    ensemble = study.experiment.ensemble
    assert ensemble.window_ps >= largest[0].value
    assert 500.0 * ensemble.samples / ensemble.window_ps >= largest[1].value


def test_a_line_that_outlasts_its_window_is_refused() -> None:
    """With the nearest window, and its samples, or length; both then do."""
    line = [{"length_km": 5000.0, "dispersion_ps_per_nm_km": -13.0}]
    with pytest.raises(ValidationError) as caught:
        Experiment.model_validate({"line": line})
    message = str(caught.value)
    assert "use a window of 32768 ps with 16384 samples" in message
    larger = {"window_ps": 32768.0, "samples": 16384}
    assert Experiment.model_validate({"line": line, "ensemble": larger}).length_km == 5000.0
    # Spans whose dispersions cancel are judged by the worst place between them.
    there_and_back = [
        {"length_km": 900.0, "beta2_ps2_per_km": sign * 20.0} for sign in (1, -1, 1, -1)
    ]
    assert Experiment.model_validate({"line": there_and_back}).length_km == 3600.0


def test_no_grid_is_large_enough_for_everything() -> None:
    """What asks for too much is named."""
    with pytest.raises(ValidationError, match="no grid is large enough"):
        _automatic(source={"width_ghz": 3000.0}, shaper={"resolution_ghz": 0.002})
    with pytest.raises(ValidationError, match="no window is long enough"):
        _automatic(shaper={"resolution_ghz": 1e-4})


def test_suggestion_of_many_is_the_largest() -> None:
    """One grid for all points: what any of them needs."""
    weak, strong = (
        with_changes(Experiment(), {"launch.total_power_mw": power}) for power in (1.0, 5000.0)
    )
    both = suggest([weak, strong])
    assert both.samples == suggest([strong]).samples > suggest([weak]).samples


EXTREMES = st.sampled_from([0.0, 1e-300, 1e-9, 1e-3, 1.0, 1e3, 1e4])


@settings(max_examples=300, deadline=None)
@given(
    EXTREMES, EXTREMES, EXTREMES, EXTREMES, EXTREMES, EXTREMES, st.sampled_from([0.1, 24.0, 5e3])
)
def test_whatever_is_asked_for_gets_a_grid_or_a_reason(
    length_km: float,
    gain_db_per_km: float,
    gamma: float,
    beta2: float,
    power_mw: float,
    resolution_ghz: float,
    width_ghz: float,
) -> None:
    """Extremes of everything that decides: a valid grid, or a refusal that a person can read."""
    span = {
        "length_km": length_km,
        "gain_db_per_km": gain_db_per_km,
        "gamma_per_w_km": gamma,
        "beta2_ps2_per_km": beta2,
    }
    try:
        study = _automatic(
            source={"width_ghz": width_ghz},
            line=[span, span],
            launch={"total_power_mw": power_mw},
            shaper={"resolution_ghz": resolution_ghz},
            ensemble={"wall_smoothing_ps": resolution_ghz},
        )
    except ValidationError as refusal:
        for error in refusal.errors():
            assert "overflow" not in error["msg"]
            assert "nan" not in error["msg"].split()
        return
    ensemble = study.experiment.ensemble
    assert 0.0 < ensemble.window_ps <= 1e7
    assert 256 <= ensemble.samples <= 2**22
