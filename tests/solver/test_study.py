"""From study to curve: order of completion, going on, giving up, checkpoints."""

import json
import pickle
import time
from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
import pytest

from solver.chain import Chain
from solver.experiment import Study
from solver.result import MAP_ROWS
from solver.study import Family, StudyState, execute
from solver.task import Leg, MapTask, RoundOutcome, RoundTask, Task, chunk_size

BASE: dict[str, Any] = {
    "experiment": {
        "relation": {"kind": "derivative"},
        "line": [
            {
                "length_km": 3.0,
                "dispersion_ps_per_nm_km": -13.0,
                "loss_db_per_km": 0.24,
                "gamma_per_w_km": 2.5,
            }
        ],
        "ensemble": {
            "window_ps": 1024.0,
            "samples": 512,
            "min_realizations": 8,
            "max_realizations": 48,
            "standard_error_target": 0.05,
            "distances": 4,
            "max_lag_ps": 100.0,
        },
    },
    "sweep": {"start": 10.0, "stop": 200.0, "points": 2},
    "variants": [
        {"name": "coupled"},
        {"name": "uncoupled", "changes": {"line.*.coupling": "uncoupled"}},
    ],
}


def _study(**changes: Any) -> Study:
    """BASE with some stages updated, e.g. ensemble={…}, span={…}, sweep={…}."""
    tree = json.loads(json.dumps(BASE))
    for stage, values in changes.items():
        if stage == "span":
            tree["experiment"]["line"][0] |= values
        elif stage in ("sweep", "variants"):
            tree[stage] = tree[stage] | values if isinstance(values, dict) else values
        else:
            tree["experiment"].setdefault(stage, {}).update(values)
    return Study.model_validate(tree)


def _finish(
    state: StudyState,
    waiting: list[Task] | None = None,
    pick: Callable[[list[Task]], int] = lambda tasks: 0,
    limit: int = 10_000,
) -> list[Task]:
    """Carry tasks out one at a time, in the order ``pick`` chooses; what is left at the limit."""
    waiting = state.ready() if waiting is None else waiting
    for _ in range(limit):
        if not waiting:
            break
        task = waiting.pop(pick(waiting))
        waiting += state.absorb(task, execute(task))
    return waiting


def _bits(state: StudyState) -> list[bytes]:
    """Every number of a result, to the bit."""
    found = []
    for point in state.result().found():
        found.append(json.dumps(point.summary()).encode())
        for name in point.estimates:
            found += [array.tobytes() for array in point.estimates[name]]
        if point.picture is not None:
            found.append(point.picture.data.tobytes())
    return found


@pytest.fixture(scope="module")
def straight() -> StudyState:
    """The study carried out in order."""
    state = StudyState(_study())
    _finish(state)
    return state


def test_any_order_gives_the_same_bits(straight: StudyState) -> None:
    """Shuffled, last first, with tasks and outcomes passed through pickle as workers do."""
    stream = np.random.default_rng(5)
    for pick in (lambda tasks: int(stream.integers(len(tasks))), lambda tasks: -1):
        state = StudyState(_study())
        waiting = state.ready()
        while waiting:
            task = pickle.loads(pickle.dumps(waiting.pop(pick(waiting))))
            waiting += state.absorb(task, pickle.loads(pickle.dumps(execute(task))))
        assert state.finished
        assert _bits(state) == _bits(straight)


def test_every_point_met_its_target_or_says_so(straight: StudyState) -> None:
    """Final, within the cap, in whole rounds, and honest about the target."""
    assert straight.finished
    ensemble = straight.study.experiment.ensemble
    for point in straight.result().found():
        summary = point.summary()
        assert summary["final"]
        assert summary["outcome"] == "completed"
        assert 8 <= summary["realizations"] <= 48
        met = summary["standard_error"] <= ensemble.standard_error_target
        assert summary["target_met"] == met
        assert met or summary["realizations"] == 48
        assert 0.0 <= summary["discretization_error"] < 0.01
        assert summary["linear"] == pytest.approx(0.0, abs=1e-9)
        assert summary["has_map"]


def test_target_and_cap() -> None:
    """A loose target stops at the fewest, a strict one at the cap, and says it was not met."""
    one = {"points": 1, "start": 100.0, "stop": 200.0}
    for target, expected, met in ((0.5, 8, True), (1e-4, 40, False)):
        changes = {"standard_error_target": target, "max_realizations": 40, "min_realizations": 8}
        state = StudyState(_study(ensemble=changes, sweep=one))
        _finish(state)
        point = state.point(0, 0)
        assert point is not None
        assert point.target_met is met
        assert point.realizations == (16 if met else expected)


def test_progress_only_rises(straight: StudyState) -> None:
    """From 0 to 1, points counted as they become final."""
    state = StudyState(_study(ensemble={"standard_error_target": 0.02}))
    waiting = state.ready()
    seen = [state.progress()]
    assert seen[0].fraction == 0.0
    while waiting:
        task = waiting.pop(0)
        waiting += state.absorb(task, execute(task))
        seen.append(state.progress())
    assert seen[-1].fraction == 1.0
    assert seen[-1].points_done == seen[-1].points_total == 4
    assert all(a.realizations <= b.realizations for a, b in pairwise(seen))
    assert all(a.points_done <= b.points_done for a, b in pairwise(seen))
    assert all(a.fraction <= b.fraction for a, b in pairwise(seen))


def test_tasks_are_small_and_distinct() -> None:
    """A task pickles to a few kB and has a key of its own; ends of the curve come first."""
    state = StudyState(_study(sweep={"points": 9}))
    tasks = state.ready()
    assert len({task.key for task in tasks}) == len(tasks) == 2 * 9 + 1
    assert max(len(pickle.dumps(task)) for task in tasks) < 5_000
    assert isinstance(tasks[0], MapTask)
    assert [task.priority for task in tasks] == sorted((t.priority for t in tasks), reverse=True)
    first = [task.point for task in tasks if isinstance(task, RoundTask) and task.variant == 0]
    assert first[:3] == [0, 8, 4]


@pytest.mark.parametrize("after", [3, 9])
def test_a_checkpoint_in_the_middle_changes_nothing(straight: StudyState, after: int) -> None:
    """Stopped after some tasks and taken up again from the arrays: the undisturbed result."""
    state = StudyState(_study())
    _finish(state, limit=after)
    kept = {key: state.checkpoint(*key) for key in state.chains}
    assert any(arrays is not None for arrays in kept.values())
    again = StudyState(_study())
    for key, arrays in kept.items():
        if arrays is not None:
            assert all(array.dtype != object for array in arrays.values())
            again.restore(*key, arrays)
    _finish(again)
    assert again.finished
    assert _bits(again) == _bits(straight)


def test_a_finished_study_restores_as_finished(straight: StudyState) -> None:
    """Nothing is left to do, and nothing is lost."""
    again = StudyState(_study())
    for key in straight.chains:
        arrays = straight.checkpoint(*key)
        assert arrays is not None
        again.restore(*key, arrays)
    assert again.ready() == []
    assert again.finished
    assert _bits(again) == _bits(straight)


def test_an_outcome_that_comes_twice_is_taken_once(straight: StudyState) -> None:
    """A lost worker's task may be run again elsewhere; its second outcome changes nothing."""
    state = StudyState(_study())
    waiting = state.ready()
    while waiting:
        task = waiting.pop(0)
        if isinstance(task, MapTask):
            continue
        outcome = execute(task)
        waiting += state.absorb(task, outcome)
        chain = state.chains[task.variant, task.point]
        before = chain.realizations
        assert state.absorb(task, outcome) == []
        assert chain.realizations == before
    assert _bits(state) == _bits(straight)


def test_a_spectrum_that_fills_its_band_gets_a_finer_time_step() -> None:
    """Refined and completed, on the axes that were asked for; or flagged, never in the curve."""
    one = {"points": 1, "start": 1500.0, "stop": 1600.0}
    small = {"samples": 256, "standard_error_target": 0.5}
    state = StudyState(_study(ensemble=small, sweep=one, variants=[{"name": "a"}]))
    _finish(state)
    point = state.point(0, 0)
    assert point is not None
    assert point.outcome == "completed"
    assert point.samples > 256
    layout = Chain(state.study, 0, 0).layout
    assert point.estimates["output1"].value.size == layout.frequency_bins == 256
    assert point.estimates["cross"].value.size == layout.lag_ps.size

    extreme = {"points": 1, "start": 60_000.0, "stop": 70_000.0}
    state = StudyState(_study(ensemble=small, sweep=extreme, variants=[{"name": "a"}]))
    _finish(state)
    point = state.point(0, 0)
    assert state.finished
    assert point is not None
    assert point.outcome == "aliased"
    assert "samples" in point.advice
    assert point.central is None
    assert point.summary()["value"] is None
    assert not point.target_met


def test_too_many_steps_are_named_at_once() -> None:
    """A point that would keep a worker busy without end is flagged before it is begun."""
    one = {"points": 1, "start": 90_000.0, "stop": 95_000.0}
    endless = {
        "length_km": 9e3,
        "gamma_per_w_km": 9e3,
        "loss_db_per_km": 0.0,
        "dispersion_ps_per_nm_km": -0.2,
    }
    state = StudyState(_study(span=endless, sweep=one))
    tasks = state.ready()
    assert len(tasks) == 3
    start_s = time.process_time()
    for task in tasks:
        assert state.absorb(task, execute(task)) == []
    assert time.process_time() - start_s < 5.0
    assert state.finished
    point = state.point(0, 0)
    assert point is not None
    assert point.outcome == "tolerance_not_met"
    assert "power" in point.advice


def test_a_study_without_the_kerr_term_is_the_linear_regime() -> None:
    """γ = 0: any steps are exact, and every estimate agrees with the closed form."""
    state = StudyState(
        _study(span={"gamma_per_w_km": 0.0}, ensemble={"standard_error_target": 0.03})
    )
    _finish(state)
    for point in state.result().found():
        assert point.outcome == "completed"
        assert point.discretization_error == 0.0
        assert point.linear is not None
        value, error = point.estimates["cross"]
        assert np.all(np.abs(value - point.linear.cross) < 6.0 * error)


def test_map_parts_join_up(straight: StudyState) -> None:
    """The live map's parts cover every row once, and show what the checked map shows."""
    state = StudyState(_study())
    task = next(task for task in state.ready() if isinstance(task, MapTask))
    parts, tasks = [], [task]
    while tasks:
        task = tasks.pop()
        outcome = execute(task)
        rows = state.live_map_rows(task, outcome)
        assert rows is not None
        assert rows.first_row == sum(p.shape[1] for p in parts)
        parts.append(rows.picture.data)
        tasks += state.absorb(task, outcome)
    joined = np.concatenate(parts, axis=1)
    point = straight.point(*state.live_map)
    assert point is not None
    assert point.picture is not None
    assert joined.shape == (3, MAP_ROWS + 1, 512)
    assert point.picture.data.shape == (5, MAP_ROWS + 1, 512)
    assert joined.dtype == np.uint8
    off = np.abs(joined[1:].astype(int) - point.picture.data[1:3].astype(int))
    assert off.mean() < 1.0


def test_the_live_map_widens_on_the_way_rather_than_alias() -> None:
    """No row is sent twice, and all are those of the checked map of the same light."""
    one = {"points": 1, "start": 1500.0, "stop": 1600.0}
    study = _study(ensemble={"samples": 256}, sweep=one, variants=[{"name": "a"}])
    state = StudyState(study)
    waiting: list[Task] = [task for task in state.ready() if isinstance(task, MapTask)]
    rows: list[np.ndarray] = []
    samples = []
    while waiting:
        task = waiting.pop()
        outcome = execute(task)
        added = state.live_map_rows(task, outcome)
        assert added is not None
        assert added.first_row == len(rows)
        rows += list(added.picture.data[0])
        waiting += state.absorb(task, outcome)
        samples += [task.leg.samples for task in waiting if isinstance(task, MapTask) and task.leg]
    assert samples == sorted(samples)
    assert samples[-1] > 256
    _finish(state)
    point = state.point(0, 0)
    assert point is not None
    assert point.picture is not None
    checked = point.picture.data[0].astype(float)
    preview = np.stack(rows).astype(float)
    assert preview.shape == checked.shape
    # Levels of 255. A column is the mean of its samples, so on a finer time step it stands for a
    # moment a fraction of a sample later; another realization differs by some 80 levels.
    assert np.abs(preview - checked).mean() < 8.0


def _round(task: RoundTask) -> RoundOutcome:
    outcome = execute(task)
    assert isinstance(outcome, RoundOutcome)
    return outcome


def test_a_round_that_needs_more_than_its_schedule_takes_it() -> None:
    """Steps and samples of too few are mended on the way: the point goes on, nothing restarts."""
    one = {"points": 1, "start": 1500.0, "stop": 1600.0}
    small = {"samples": 256, "standard_error_target": 0.02}
    study = _study(ensemble=small, sweep=one, variants=[{"name": "a"}])
    chain = Chain(study, 0, 0)
    family = Family([chain])
    first = family.next_round()[0]
    later = family.absorb(first, _round(first))[0]
    assert later.schedule is not None
    assert later.schedule[-1].samples > 256
    poor = replace(later, schedule=tuple(Leg(256, leg.steps) for leg in later.schedule))
    good, mended = _round(later), _round(poor)
    assert mended.outcome == "completed"
    assert sum(mended.transforms) > sum(good.transforms)
    scale = np.abs(good.blocks).max(axis=0)
    moments = slice(0, 5 * chain.layout.distances)
    off = np.abs(mended.blocks - good.blocks)[:, moments] / scale[moments]
    assert off.max() < 0.02
    family.absorb(later, mended)
    assert chain.realizations == later.first + later.count
    assert not chain.final or chain.outcome == "completed"


def test_the_size_of_tasks_changes_no_bit() -> None:
    """However fast a worker seems, and so however many realizations a task gets."""
    ensemble = {"standard_error_target": 0.002, "max_realizations": 120}
    study = _study(ensemble=ensemble, sweep={"points": 1, "start": 100.0, "stop": 200.0})
    bits, largest = [], []
    for seconds in (1e3, 0.08, 1e-6):
        state = StudyState(study)
        waiting, counts = state.ready(), []
        while waiting:
            task = waiting.pop(0)
            outcome = execute(task)
            if isinstance(task, RoundTask) and isinstance(outcome, RoundOutcome):
                counts.append(task.count)
                outcome = replace(outcome, seconds=seconds)
            waiting += state.absorb(task, outcome)
        assert sum(counts) == 2 * 120
        largest.append(max(counts))
        bits.append(_bits(state))
    assert bits[0] == bits[1] == bits[2]
    chunk = chunk_size(512)
    assert largest[0] == chunk < largest[1] < largest[2]
