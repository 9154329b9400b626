"""``crossdip run`` and the rest of the command line."""

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import h5py
import pytest

from solver.result import read_result
from tests.serving import ROOT, LiveServer, crossdip, tiny


@pytest.fixture
def study_file(tmp_path: Path) -> Path:
    path = tmp_path / "study.json"
    path.write_text(json.dumps(tiny(1)))
    return path


def test_run_writes_what_the_server_would(
    study_file: Path, tmp_path: Path, server: LiveServer
) -> None:
    output = tmp_path / "result.h5"
    ended = crossdip("run", str(study_file), "-o", str(output), "--workers", "1")
    assert ended.returncode == 0, ended.stderr
    assert ended.stdout == f"{output}\n"
    assert "points" in ended.stderr
    assert "\x1b" not in ended.stderr
    run_id = server.post(tiny(1))
    server.wait(run_id, "done")
    theirs = read_result(server.data / "results" / f"{run_id}.h5")
    ours = read_result(output)
    assert ours.study == theirs.study
    for our_curve, their_curve in zip(ours.points, theirs.points, strict=True):
        for our_point, their_point in zip(our_curve, their_curve, strict=True):
            assert our_point is not None
            assert their_point is not None
            assert our_point.detail() == their_point.detail()
    assert sorted(path.name for path in tmp_path.iterdir()) == ["result.h5", "study.json"]


def test_any_number_of_workers_gives_the_same_bits(tmp_path: Path) -> None:
    """Several rounds of several tasks for each point, so that the order of completion differs."""
    study = tiny(3, standard_error_target=0.002, max_realizations=160)
    path = tmp_path / "study.json"
    path.write_text(json.dumps(study))
    results = []
    for workers in (1, 2, 3):
        output = tmp_path / f"{workers}.h5"
        ended = crossdip("run", str(path), "-o", str(output), "--workers", str(workers))
        assert ended.returncode == 0, ended.stderr
        results.append(_everything(output))
    assert any(point.realizations > 16 for point in read_result(tmp_path / "1.h5").found())
    assert results[1] == results[0]
    assert results[2] == results[0]


def _everything(path: Path) -> dict[str, Any]:
    """Every dataset of a result, as bytes, and every attribute that the computation decides."""
    found: dict[str, Any] = {}

    def keep(name: str, node: h5py.Group | h5py.Dataset) -> None:
        if isinstance(node, h5py.Dataset):
            found[name] = node[()].tobytes()
        found.update({f"{name}@{key}": value for key, value in node.attrs.items()})

    with h5py.File(path, "r") as file:
        file.visititems(keep)
    return found


def _with(**ensemble: Any) -> str:
    return json.dumps({"experiment": {"ensemble": ensemble}})


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("{", "is not JSON: line 1, column 2"),
        ("[" * 100_000, "nested too deeply"),
        (_with(samples=1000), "experiment.ensemble.samples: samples must be a power of two"),
        (_with(seed=-1), "experiment.ensemble.seed: Seed must be a whole number from 0"),
        ('{"sweep": {"colour": 1}}', "sweep.colour"),
        (None, "No such file"),
    ],
)
def test_bad_input_is_one_clear_line_and_status_2(
    tmp_path: Path, text: str | None, words: str
) -> None:
    study = tmp_path / "study.json"
    if text is not None:
        study.write_text(text)
    ended = crossdip("run", str(study), "-o", str(tmp_path / "result.h5"))
    assert (ended.returncode, ended.stdout) == (2, "")
    assert words in ended.stderr
    assert ended.stderr.count("\n") == 1
    assert not (tmp_path / "result.h5").exists()


def test_a_missing_folder_is_noticed_before_the_work(study_file: Path, tmp_path: Path) -> None:
    ended = crossdip("run", str(study_file), "-o", str(tmp_path / "none" / "result.h5"))
    assert ended.returncode == 2
    assert "does not exist: make it first" in ended.stderr


@pytest.mark.parametrize("command", [[], ["serve"], ["run"]])
def test_every_command_has_help(command: list[str]) -> None:
    ended = crossdip(*command, "--help")
    assert ended.returncode == 0
    assert "usage: crossdip" in ended.stdout


def test_the_server_is_imported_without_compilers_or_cluster() -> None:
    check = (
        "import sys, server.app; "
        "print([m for m in ('numba', 'pyfftw', 'distributed') if m in sys.modules])"
    )
    ended = subprocess.run(
        [sys.executable, "-c", check], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert ended.stdout.strip() == "[]"
