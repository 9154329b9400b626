"""The FFT provider: convention, and one plan for all processes of a machine."""

from pathlib import Path

import numpy as np
import pytest

from solver.experiment import Precision
from solver.transforms import MOST_TOGETHER, Transforms, batch_size
from tests import reference


@pytest.mark.parametrize(("precision", "rounding"), [("single", 1e-6), ("double", 1e-14)])
@pytest.mark.parametrize("samples", [256, 1000])
def test_convention(precision: Precision, rounding: float, samples: int) -> None:
    """numpy's forward transform; forward and inverse multiply by the samples."""
    field = reference.stirred_light(1, 3, samples, 1.0, 0.1, 1.0)
    work = Transforms(3, samples, precision)
    work.buffer[:] = field
    work.forward()
    assert reference.relative_l2(work.buffer, np.fft.fft(field)) < rounding
    work.inverse()
    assert reference.relative_l2(work.buffer / samples, field) < rounding


def test_one_plan_for_all(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The first process's plan is kept, and whoever comes second gets its bits."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    field = reference.stirred_light(1, 2, 1024, 1.0, 0.1, 1.0)
    bits = set()
    for _ in range(3):
        work = Transforms(2, 1024, "single")
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
    Transforms(1, 256, "double")
    (kept,) = [path for path in tmp_path.rglob("*") if path.is_file()]
    kept.write_bytes(content)
    field = reference.stirred_light(1, 1, 256, 1.0, 0.1, 1.0)
    blocked = tmp_path / "file"
    blocked.write_text("")
    for home in (tmp_path, blocked):
        monkeypatch.setenv("XDG_CACHE_HOME", str(home))
        work = Transforms(1, 256, "double")
        work.buffer[:] = field
        work.forward()
        assert reference.relative_l2(work.buffer, np.fft.fft(field)) < 1e-14


def test_batches_stay_in_the_cache() -> None:
    """Few together where grids are large, never none."""
    assert batch_size(256) == MOST_TOGETHER
    assert batch_size(2**14) == 1
    assert batch_size(2**22) == 1
