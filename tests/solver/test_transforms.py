"""The FFT providers: convention, one plan for all processes of a machine, and doing without."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from solver.experiment import Precision, Study
from solver.study import StudyState, execute
from solver.transforms import (
    MOST_TOGETHER,
    PLANNED,
    PlannedTransforms,
    ScipyTransforms,
    Transforms,
    batch_size,
    batches,
    plan_ahead,
    resampled,
    usual_shapes,
)
from tests import reference

SMALL_STUDY = {
    "experiment": {
        "ensemble": {
            "samples": 1024,
            "window_ps": 2048.0,
            "distances": 4,
            "min_realizations": 16,
            "max_realizations": 16,
        }
    },
    "sweep": {"points": 2, "start": 20.0, "stop": 200.0},
    "variants": [{"name": "only"}],
}
CENTRALS = """
import json, sys
sys.modules["pyfftw"] = None
from tests.solver.test_transforms import centrals
print(json.dumps(centrals()))
"""


def centrals() -> list[tuple[float, float]]:
    """C12(0) and its standard error at each point of a small study, computed in this process."""
    state = StudyState(Study.model_validate(SMALL_STUDY))
    waiting = state.ready()
    while waiting:
        task = waiting.pop()
        waiting += state.absorb(task, execute(task))
    return [point.central for point in state.result().points[0]]


@pytest.mark.parametrize("provider", [PlannedTransforms, ScipyTransforms])
@pytest.mark.parametrize(("precision", "rounding"), [("single", 1e-6), ("double", 1e-14)])
@pytest.mark.parametrize("samples", [256, 1000])
def test_convention(
    provider: type[Transforms], precision: Precision, rounding: float, samples: int
) -> None:
    """numpy's forward transform; forward and inverse multiply by the samples; all in place."""
    field = reference.stirred_light(1, 3, samples, 1.0, 0.1, 1.0)
    work = provider(3, samples, precision)
    buffer = work.buffer
    buffer[:] = field
    work.forward()
    assert reference.relative_l2(buffer, np.fft.fft(field)) < rounding
    work.inverse()
    assert reference.relative_l2(buffer / samples, field) < rounding
    assert work.buffer is buffer
    assert buffer.dtype == (np.complex64 if precision == "single" else np.complex128)


def test_a_study_without_pyfftw_says_so_and_finds_the_same() -> None:
    """One line that tells the cost, and a result equal to within single precision."""
    assert PLANNED
    without = subprocess.run(
        [sys.executable, "-c", CENTRALS],
        cwd=Path(__file__).parents[2],
        capture_output=True,
        text=True,
        check=True,
    )
    (line,) = without.stderr.splitlines()
    assert "pip install pyfftw" in line
    np.testing.assert_allclose(json.loads(without.stdout), centrals(), atol=1e-5)


def test_a_provider_may_hand_back_other_memory(monkeypatch: pytest.MonkeyPatch) -> None:
    """scipy overwrites its input as a favour; the buffer holds the result without it, too."""
    field = reference.stirred_light(1, 1, 256, 1.0, 0.1, 1.0)
    work = ScipyTransforms(1, 256, "double")
    work.buffer[:] = field
    monkeypatch.setattr("solver.transforms.fft.fft", lambda x, **_: np.fft.fft(x))
    work.forward()
    assert reference.relative_l2(work.buffer, np.fft.fft(field)) < 1e-14


def test_plans_made_ahead_are_the_ones_used(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Every batch of a grid has its shape in the list; a second call changes no file."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    shapes = usual_shapes(64, 128, "single", piloted=4)
    assert {(len(rows), 64, "single") for rows in batches(range(15), 64)} <= set(shapes)
    assert (4, 2**20, "double") in usual_shapes(2**20, 2**20, "double", piloted=4)
    plan_ahead(shapes)

    def kept() -> dict[str, bytes]:
        return {path.name: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()}

    plans = kept()
    assert len(plans) == len(shapes)
    plan_ahead(shapes)
    PlannedTransforms(8, 128, "single")
    assert kept() == plans


def test_one_plan_for_all(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The first process's plan is kept, and whoever comes second gets its bits."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    field = reference.stirred_light(1, 2, 1024, 1.0, 0.1, 1.0)
    bits = set()
    for _ in range(3):
        work = PlannedTransforms(2, 1024, "single")
        work.buffer[:] = field
        work.forward()
        bits.add(work.buffer.tobytes())
    (kept,) = [path for path in tmp_path.rglob("*") if path.is_file()]
    assert kept.name.endswith("single-2x1024")
    assert len(bits) == 1


@pytest.mark.parametrize("content", [b"", b"not a plan"])
def test_a_spoilt_or_missing_cache_is_done_without(
    content: bytes, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An unreadable plan, or a folder that cannot be made, costs speed and nothing else."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    PlannedTransforms(1, 256, "double")
    (kept,) = [path for path in tmp_path.rglob("*") if path.is_file()]
    kept.write_bytes(content)
    field = reference.stirred_light(1, 1, 256, 1.0, 0.1, 1.0)
    blocked = tmp_path / "file"
    blocked.write_text("")
    for home in (tmp_path, blocked):
        monkeypatch.setenv("XDG_CACHE_HOME", str(home))
        work = PlannedTransforms(1, 256, "double")
        work.buffer[:] = field
        work.forward()
        assert reference.relative_l2(work.buffer, np.fft.fft(field)) < 1e-14


def test_batches_stay_in_the_cache() -> None:
    """Few together where grids are large, never none."""
    assert batch_size(256) == MOST_TOGETHER
    assert batch_size(2**14) == 1
    assert batch_size(2**22) == 1


def test_batches_cover_every_row_once_in_few_shapes() -> None:
    """In order, none larger than fits, all sizes powers of two."""
    for rows, samples in ((range(23), 512), (range(5, 6), 4096), (range(3, 40), 2**13)):
        parts = list(batches(rows, samples))
        assert [row for part in parts for row in part] == list(rows)
        assert all(len(part) <= batch_size(samples) for part in parts)
        assert all(len(part) & (len(part) - 1) == 0 for part in parts)


@pytest.mark.parametrize(("dtype", "rounding"), [(np.complex64, 1e-6), (np.complex128, 1e-14)])
@pytest.mark.parametrize(("few", "many"), [(256, 512), (256, 4096), (300, 1000)])
def test_resampled_there_and_back(dtype: type, rounding: float, few: int, many: int) -> None:
    """Band-limited light returns, is continued between its samples, and keeps its mean power."""
    light = reference.stirred_light(2, 3, few, 1000.0 / few, 0.02, 1.0).astype(dtype)
    fine = resampled(light, many)
    assert fine.shape == (3, 2, many)
    assert fine.dtype == dtype
    assert reference.relative_l2(resampled(fine, few), light) < rounding
    if many % few == 0:
        assert reference.relative_l2(fine[..., :: many // few], light) < rounding
    power = [np.mean(np.abs(field) ** 2, axis=2, dtype=np.float64) for field in (light, fine)]
    np.testing.assert_allclose(power[1], power[0], rtol=10 * rounding)
    assert resampled(light, few) is light


@pytest.mark.parametrize(("have", "samples"), [(64, 256), (256, 64), (60, 100), (100, 60)])
def test_resampled_keeps_each_bin_in_its_place(have: int, samples: int) -> None:
    """The spectrum per sample is the same in the narrower band, and zero or left out beyond."""
    stream = np.random.default_rng(8)
    spectrum = stream.standard_normal((1, 2, have)) + 1j * stream.standard_normal((1, 2, have))
    found = np.fft.fft(resampled(np.fft.ifft(spectrum, norm="forward"), samples), norm="forward")
    half = min(have, samples) // 2
    np.testing.assert_allclose(found[..., :half], spectrum[..., :half], rtol=1e-12)
    np.testing.assert_allclose(found[..., -half:], spectrum[..., -half:], rtol=1e-12)
    assert np.abs(found[..., half:-half]).max(initial=0.0) < 1e-14
