"""Sweeps over one and over two parameters: the curves, their tables and their file."""

import csv
import io
import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from pydantic import ValidationError

from solver import ensemble
from solver.experiment import Experiment, Study, with_changes
from solver.features import moments
from solver.kernels import spectral_moments
from solver.result import along_csv, curves_csv, read_result, write_result
from solver.study import StudyState, execute
from solver.task import APART, RoundTask, Task
from tests import reference

SMALL: dict[str, Any] = {
    "window_ps": 1024.0,
    "samples": 512,
    "min_realizations": 8,
    "max_realizations": 32,
    "standard_error_target": 0.05,
    "distances": 2,
    "max_lag_ps": 100.0,
}
SPAN: dict[str, Any] = {
    "length_km": 3.0,
    "dispersion_ps_per_nm_km": -13.0,
    "loss_db_per_km": 0.24,
    "gamma_per_w_km": 2.5,
}
BOTH: dict[str, Any] = {
    "experiment": {"line": [SPAN], "ensemble": SMALL, "relation": {"kind": "derivative"}},
    "sweep": {"start": 10.0, "stop": 200.0, "points": 2},
    "second": {
        "parameter": "line.*.length_km",
        "start": 2.0,
        "stop": 4.0,
        "points": 3,
        "spacing": "linear",
    },
    "variants": [
        {"name": "on"},
        {"name": "off", "changes": {"line.*.coupling": "uncoupled"}},
    ],
}


def _finished(tree: dict[str, Any]) -> tuple[StudyState, list[Task]]:
    """A study carried out in order, and its tasks."""
    state = StudyState(Study.model_validate(tree))
    waiting = state.ready()
    done = []
    while waiting:
        task = waiting.pop(0)
        waiting += state.absorb(task, execute(task))
        done.append(task)
    assert state.finished
    return state, done


@pytest.fixture(scope="module")
def both() -> StudyState:
    """Two variants × three lengths × two powers."""
    return _finished(BOTH)[0]


def test_every_variant_is_a_curve_for_each_value() -> None:
    """In order, named, and made of both parameters."""
    study = Study.model_validate(BOTH)
    assert study.seconds == 3
    assert study.points_total == 12
    assert [curve.name for curve in study.curves][::2] == [
        "on, Length 2 km",
        "on, Length 4 km",
        "off, Length 3 km",
    ]
    assert [study.first_of(curve) for curve in range(6)] == [0, 1, 2, 0, 1, 2]
    there = study.experiment_at(4, 1)
    assert (there.length_km, there.launch.total_power_mw) == (3.0, 200.0)
    assert there.line[0].coupling == "uncoupled"
    assert study == Study.model_validate_json(study.model_dump_json())


def test_a_study_without_a_second_axis_is_what_it_was() -> None:
    """Its identity does not know of one, and its curves are its variants."""
    plain = {name: stage for name, stage in BOTH.items() if name != "second"}
    study = Study.model_validate(plain)
    assert study.identity == Study.model_validate({**plain, "second": None}).identity
    assert study.identity != Study.model_validate(BOTH).identity
    assert study.curves == study.variants
    assert study.seconds == 1


@pytest.mark.parametrize(
    ("second", "where", "says"),
    [
        ({"parameter": "launch.total_power_mw"}, "second.parameter", "same parameter"),
        ({"parameter": "launch.share_1", "stop": 2.0}, "second", "less than or equal to 1"),
        ({"parameter": "line.*.length_km", "start": 1e-9}, "second", "greater than"),
        ({"parameter": "no.such"}, "parameter", "not a numeric parameter"),
    ],
)
def test_contradictions_of_a_second_axis(second: dict[str, Any], where: str, says: str) -> None:
    """Its ends are tried out before anything runs."""
    spacing = {"spacing": "linear", "start": 0.5, "stop": 0.9}
    with pytest.raises(ValidationError) as caught:
        Study.model_validate({**BOTH, "second": {**spacing, **second}})
    contradiction = caught.value.errors()[0]["ctx"]["error"]
    assert contradiction.where == where
    assert says in str(contradiction)


def test_a_curve_is_what_a_study_of_its_own_finds(both: StudyState) -> None:
    """The same bits, whatever else is computed beside."""
    alone, _ = _finished(
        {
            **{name: stage for name, stage in BOTH.items() if name != "second"},
            "experiment": {**BOTH["experiment"], "line": [{**SPAN, "length_km": 4.0}]},
        }
    )
    for variant in (0, 1):
        for point in (0, 1):
            own, shared = alone.point(variant, point), both.point(3 * variant + 2, point)
            assert own is not None
            assert shared is not None
            assert own.central == shared.central
            assert own.difference == shared.difference
    assert own.difference is not None


def test_what_a_task_touches(both: StudyState) -> None:
    """A first variant's point changes those compared with it: at the same second value."""
    task = RoundTask("t", 1, 0, 0, both.chains[1, 0].experiment, 0, 4, None)
    assert both.touched(task) == [(1, 0), (4, 0)]
    task = RoundTask("t", 4, 1, 0, both.chains[4, 1].experiment, 0, 4, None)
    assert both.touched(task) == [(4, 1)]


def test_tables_and_file_carry_both_axes(both: StudyState, tmp_path: Path) -> None:
    """Axes with units; the surface over variants, both parameters and distance."""
    result = both.result()
    rows = list(csv.DictReader(io.StringIO(curves_csv(result))))
    assert len(rows) == 12
    assert rows[3]["variant"] == "on"
    assert float(rows[3]["line.*.length_km [km]"]) == 3.0
    assert float(rows[3]["launch.total_power_mw [mW]"]) == 200.0
    point = both.point(1, 1)
    assert point is not None
    assert point.central is not None
    assert float(rows[3]["central_cross_correlation"]) == pytest.approx(point.central[0], rel=1e-6)

    along = list(csv.DictReader(io.StringIO(along_csv(result))))
    assert len(along) == 12 * 3
    third = along[11]
    assert float(third["distance [km]"]) == 3.0
    assert float(third["central_cross_correlation"]) == pytest.approx(point.central[0], rel=1e-6)

    axes = json.loads(json.dumps(result.axes.to_json()))
    assert axes["second"]["values"] == [2.0, 3.0, 4.0]
    assert axes["second"]["unit"] == "km"

    path = tmp_path / "both.h5"
    write_result(path, result, title="", created="")
    with h5py.File(path) as file:
        assert list(file["axes/second"]) == [2.0, 3.0, 4.0]
        assert file["axes/second"].attrs["unit"] == "km"
        surface = file["surface/value"][()]
        assert surface.shape == (2, 3, 2, 3)
        assert surface[0, 1, 1, 2] == point.central[0]
    again = read_result(path)
    assert [p.summary() for p in again.found()] == [p.summary() for p in result.found()]


def test_a_surface_of_power_and_distance_comes_from_one_sweep() -> None:
    """Every point's C12(0) along the line; what is not there yet is nan."""
    plain = {name: stage for name, stage in BOTH.items() if name != "second"}
    state = StudyState(Study.model_validate({**plain, "variants": [{"name": "on"}]}))
    task = next(t for t in state.ready() if isinstance(t, RoundTask) and t.point == 1)
    state.absorb(task, execute(task))
    value, error = state.result().surface()
    assert value.shape == error.shape == (1, 1, 2, 3)
    assert np.isnan(value[0, 0, 0]).all()
    found = state.point(0, 1)
    assert found is not None
    assert np.array_equal(value[0, 0, 1], found.estimates["distance"].value)


def _receivers(**sweep: Any) -> dict[str, Any]:
    """A sweep of what is behind the line."""
    plain = {name: stage for name, stage in BOTH.items() if name != "second"}
    receiver = {"filter": "bessel4", "thermal_pa_per_sqrt_hz": 20.0, "received_mw": 1.0}
    return {
        **plain,
        "experiment": {
            **BOTH["experiment"],
            "receiver": receiver,
            "ensemble": {**SMALL, "standard_error_target": 0.008, "max_realizations": 80},
        },
        "sweep": {"parameter": "receiver.bandwidth_ghz", "start": 4.0, "stop": 64.0, "points": 3},
    }


AMPLIFIED = {
    "experiment": {
        **_receivers()["experiment"],
        "preamplifier": {"noise_figure_db": 5.0, "bandpass_ghz": 200.0},
    },
    "sweep": {
        "parameter": "preamplifier.noise_figure_db",
        "start": 3.0,
        "stop": 30.0,
        "points": 3,
        "spacing": "linear",
    },
}


def _bits(point: Any) -> list[bytes]:
    found = [json.dumps(point.detail()).encode(), point.picture.data.tobytes()]
    for name in point.estimates:
        found += [array.tobytes() for array in point.estimates[name]]
    return found


@pytest.mark.parametrize("tree", [_receivers(), {**_receivers(), **AMPLIFIED}])
def test_what_is_behind_the_line_is_swept_without_propagating_again(tree: dict[str, Any]) -> None:
    """One task for all points of a light; each point to the bit what it is on its own."""
    state, tasks = _finished(tree)
    rounds = [task for task in tasks if isinstance(task, RoundTask)]
    assert all(len(task.places) > 1 for task in rounds if task.first == 0)
    assert {task.variant for task in rounds} == {0, 1}
    counts = set()
    for place in state.chains:
        variant, at = place
        together = state.point(*place)
        assert together is not None
        counts.add(together.realizations)
        value = state.study.sweep.values()[at]
        single = {**tree, "sweep": {**tree["sweep"], "start": value, "points": 1}}
        alone = StudyState(Study.model_validate(single))
        waiting = [t for t in alone.ready() if isinstance(t, RoundTask) and t.variant == variant]
        while waiting:
            task = waiting.pop()
            assert isinstance(task, RoundTask)
            assert task.beside == ()
            waiting += alone.absorb(task, execute(task))  # type: ignore[arg-type]
        chain = alone.chains[variant, 0].result()
        assert chain is not None
        assert together.central == chain.central
        own = replace(chain, point=at, difference=together.difference)
        assert _bits(own) == _bits(together)
    assert len(counts) > 1, "points of one light should stop where each has enough"


def test_variants_that_differ_in_the_receiver_share_their_light() -> None:
    """Found by what they are, not by where they stand in the study."""
    tree = {
        **{name: stage for name, stage in BOTH.items() if name != "second"},
        "variants": [
            {"name": "ideal"},
            {"name": "slow", "changes": {"receiver.filter": "gaussian"}},
            {"name": "off", "changes": {"line.*.coupling": "uncoupled"}},
        ],
    }
    state = StudyState(Study.model_validate(tree))
    rounds = [task for task in state.ready() if isinstance(task, RoundTask)]
    assert sorted(task.places for task in rounds) == [
        [(0, 0), (1, 0)],
        [(0, 1), (1, 1)],
        [(2, 0)],
        [(2, 1)],
    ]
    assert state.touched(rounds[0])[:3] == [(0, rounds[0].point)] + [
        (variant, rounds[0].point) for variant in (1, 2)
    ]


def test_a_receiver_that_needs_shorter_steps_goes_alone(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the bias it sees is above what is allowed; the others go on without it."""
    seen = ensemble.Detection.moments

    def sensitive(self: Any, sight: Any, realizations: range) -> Any:
        """A receiver of which the narrowest sees a bias that grows with the steps."""
        found = seen(self, sight, realizations)
        if self.receiver.bandwidth_ghz == 4.0:
            found = found.copy()
            power = np.abs(sight.field[:, 0]) ** 2
            shape = np.mean(power**2, axis=1) / np.mean(power, axis=1) ** 2
            found[:, 4] *= 1.0 + 30.0 * (shape - 2.0)
        return found

    monkeypatch.setattr(ensemble.Detection, "moments", sensitive)
    state = StudyState(Study.model_validate({**_receivers(), "variants": [{"name": "on"}]}))
    task = next(task for task in state.ready() if isinstance(task, RoundTask))
    outcome = execute(task)
    kinds = {task.places[0]: outcome.outcome}  # type: ignore[union-attr]
    for place, other in zip(task.places[1:], outcome.beside, strict=True):  # type: ignore[union-attr]
        kinds[place] = other.outcome
    assert kinds == {(0, 0): APART, (0, 1): "completed", (0, 2): "completed"}
    following = state.absorb(task, outcome)
    assert [t.places for t in following if t.first == 0] == [[(0, 0)]]  # type: ignore[attr-defined]
    assert {t.first for t in following if len(t.places) == 2} == {16, 32}  # type: ignore[attr-defined]


def test_moments_from_spectra_are_those_of_the_traces() -> None:
    """The kernel against plain arithmetic, and a receiver's moments against its intensities."""
    stream = np.random.default_rng(3)
    spectrum = np.fft.rfft(stream.exponential(size=(3, 2, 64)), norm="forward")
    passed = np.r_[1.0, 2.0 * stream.random(31), stream.random()]
    found = spectral_moments(spectrum, passed)
    np.testing.assert_allclose(found, reference.spectral_moments(spectrum, passed), rtol=1e-12)

    receivers: list[dict[str, Any]] = [
        {"filter": "bessel4", "bandwidth_ghz": 5.0},
        {"extinction_db": -15.0, "thermal_pa_per_sqrt_hz": 30.0, "received_mw": 1.0},
        {"shot_noise": "on", "filter": "gaussian", "received_mw": 0.01},
    ]
    for receiver in receivers:
        for name, ends in (("single", 3e-6), ("double", 1e-12)):
            changes = {"receiver": receiver, "ensemble.precision": name}
            bench = ensemble.Bench(with_changes(Experiment(), changes))
            detection, fields = bench.detections[0], bench.passage.fields(range(4))
            direct = moments(detection.detected(detection.received(fields, range(4)), range(4)))
            own = detection.moments(detection.sight(fields), range(4))
            np.testing.assert_allclose(own, direct, rtol=ends)


@pytest.mark.parametrize("after", [1, 2])
def test_points_of_one_light_are_taken_up_again_wherever_each_was_left(after: int) -> None:
    """Checkpoints of one family written at different times, one of them lost: the same bits."""
    tree = {**_receivers(), "variants": [{"name": "on"}]}
    straight, _ = _finished(tree)
    state = StudyState(Study.model_validate(tree))
    waiting = [task for task in state.ready() if isinstance(task, RoundTask)]
    early = {}
    for number in range(after):
        task = waiting.pop(0)
        waiting += state.absorb(task, execute(task))  # type: ignore[arg-type]
        if number == 0:
            early = {place: state.checkpoint(*place) for place in state.chains}
    late = {place: state.checkpoint(*place) for place in state.chains}
    again = StudyState(Study.model_validate(tree))
    for place, arrays in (((0, 0), early[0, 0]), ((0, 1), late[0, 1])):
        assert arrays is not None
        again.restore(*place, arrays)
    remaining: list[Task] = again.ready()
    while remaining:
        task = remaining.pop(0)  # type: ignore[assignment]
        remaining += again.absorb(task, execute(task))
    assert again.finished
    for place in straight.chains:
        assert _bits(again.point(*place)) == _bits(straight.point(*place))
