"""The result file and the table of curves."""

import csv
import io
import json
from pathlib import Path

import h5py
import numpy as np
import pytest

from solver.experiment import Study
from solver.result import curves_csv, read_result, write_result
from solver.statistics import ESTIMATES
from solver.study import StudyState, execute
from solver.view import FIGURES

STUDY = Study.model_validate(
    {
        "experiment": {
            "line": [{"length_km": 2.0, "beta2_ps2_per_km": 16.0, "gamma_per_w_km": 2.5}],
            "ensemble": {
                "window_ps": 1024.0,
                "samples": 256,
                "min_realizations": 8,
                "max_realizations": 16,
                "max_lag_ps": 100.0,
                "distances": 3,
            },
        },
        "sweep": {"start": 10.0, "stop": 60_000.0, "points": 3},
        "variants": [{"name": "one, with a comma"}],
    }
)


@pytest.fixture(scope="module")
def state() -> StudyState:
    """A study with a point that aliases and a point not reached."""
    made = StudyState(STUDY)
    waiting = [task for task in made.ready() if task.kind == "round" and task.point != 1]
    while waiting:
        task = waiting.pop()
        waiting += made.absorb(task, execute(task))
    return made


def test_round_trip(state: StudyState, tmp_path: Path) -> None:
    """Everything comes back as it was, to the bit, in a file that says what it is."""
    path = tmp_path / "found.h5"
    result = state.result()
    write_result(path, result, title="Däs", created="2030-01-01T00:00:00Z")
    assert [p.name for p in tmp_path.iterdir()] == ["found.h5"]
    again = read_result(path)
    assert again.study == result.study
    assert again.points[0][1] is None
    for before, after in zip(result.found(), again.found(), strict=True):
        assert json.dumps(before.detail()) == json.dumps(after.detail())
        assert (before.steps, before.transforms) == (after.steps, after.transforms)
        for name in before.estimates:
            for a, b in zip(before.estimates[name], after.estimates[name], strict=True):
                np.testing.assert_array_equal(a, b)
        if before.picture is not None:
            assert after.picture is not None
            np.testing.assert_array_equal(before.picture.data, after.picture.data)
    assert [p.outcome for p in again.found()] == ["completed", "aliased"]


def test_the_file_describes_itself(state: StudyState, tmp_path: Path) -> None:
    """Units on every axis and estimate; the study and its identity in attributes."""
    path = tmp_path / "found.h5"
    write_result(path, state.result(), title="t", created="c")
    with h5py.File(path) as file:
        assert file.attrs["identity"] == STUDY.identity
        assert Study.model_validate_json(file.attrs["study"]) == STUDY
        assert all("unit" in axis.attrs for axis in file["axes"].values())
        assert file["axes/sweep"].attrs["unit"] == "mW"
        curve = file["variants/0"]
        assert list(curve["point"]) == [0, 2]
        assert [text.decode() for text in curve["outcome"]] == ["completed", "aliased"]
        for name, unit in ESTIMATES.items():
            assert curve[name]["value"].attrs["unit"] == unit
            assert curve[name]["value"].shape == curve[name]["standard_error"].shape
            if name != "spectral_fwhm_ghz":  # this light is too narrow for its axis
                assert np.isfinite(curve[name]["value"][0]).all(), name
            assert np.isnan(curve[name]["value"][1]).all()
            axes = str(curve[name]["value"].attrs.get("order", "")).split(", ")
            if all(axis in file["axes"] for axis in axes) and axes != [""]:
                shape = tuple(len(file["axes"][axis]) for axis in axes)
                assert curve[name]["value"].shape[1:] == shape, name
            elif axes == [""]:
                assert curve[name]["value"].shape[1:] == (1,), name
        lengths = {name: axis.shape[0] for name, axis in file["axes"].items()}
        assert curve["cross/value"].shape == (2, lengths["lag_ps"])
        assert curve["distance/value"].shape == (2, lengths["distance_km"])
        assert curve["output1/value"].shape == (2, lengths["offset_ghz"])
        assert curve["map"].shape == (2, 5, lengths["map_distance_km"], lengths["map_time_ps"])


def test_a_disk_that_refuses_leaves_nothing(
    state: StudyState, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """OSError, the old file untouched, no draft beside it."""
    path = tmp_path / "found.h5"
    path.write_bytes(b"old")

    def full(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(OSError, match="No space left"):
        write_result(path, state.result(), title="t", created="c")
    assert path.read_bytes() == b"old"
    assert [p.name for p in tmp_path.iterdir()] == ["found.h5"]


def test_other_files_are_refused(tmp_path: Path) -> None:
    """A file of another kind is named as such, not read as an empty result."""
    foreign = tmp_path / "foreign.h5"
    with h5py.File(foreign, "w") as file:
        file.attrs["format"] = "something else"
    with pytest.raises(ValueError, match=r"foreign\.h5 is not a result file"):
        read_result(foreign)
    text = tmp_path / "text.h5"
    text.write_text("no")
    with pytest.raises(OSError, match="open file"):
        read_result(text)


def test_csv(state: StudyState) -> None:
    """One row for each point found; no value where the outcome is not completed."""
    rows = list(csv.DictReader(io.StringIO(curves_csv(state.result()))))
    assert len(rows) == 2
    assert {row["variant"] for row in rows} == {"one, with a comma"}
    first, last = rows
    assert float(first["launch.total_power_mw [mW]"]) == 10.0
    point = state.point(0, 0)
    assert point is not None
    assert point.central is not None
    assert float(first["central_cross_correlation"]) == pytest.approx(point.central[0], rel=1e-6)
    assert float(first["standard_error"]) > 0.0
    assert first["outcome"] == "completed"
    assert last["outcome"] == "aliased"
    assert last["central_cross_correlation"] == last["standard_error"] == ""


def test_details_are_json(state: StudyState) -> None:
    """Every detail and the axes survive strict JSON: no NaN, no infinity, no numpy type."""
    for point in state.result().found():
        json.dumps(point.detail(), allow_nan=False)
        if point.outcome == "completed":
            figures = point.summary()["figures"]
            assert set(figures) == set(FIGURES)
            assert all(one["standard_error"] > 0.0 for one in figures.values())
    axes = state.result().axes.to_json()
    json.dumps(axes, allow_nan=False)
    assert axes["sweep"]["values"] == STUDY.sweep.values()
