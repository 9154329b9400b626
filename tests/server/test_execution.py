"""One study on an engine of one thread: what is told and what is kept."""

import asyncio
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, cast

import pytest

from server.checkpoints import Checkpoints
from server.engine import Engine
from server.execution import Execution, News
from solver.experiment import Study
from solver.study import StudyState
from tests.asynchronous import run
from tests.serving import tiny

STUDY = Study.model_validate(tiny(5, standard_error_target=0.03, max_realizations=160))


class OneThread:
    """Carries tasks out in this process, and no more than it is told to."""

    def __init__(self, most: int = 1_000_000) -> None:
        self._thread = ThreadPoolExecutor(1)
        self._left = most

    async def run(self, function: Callable[..., Any], *args: Any, priority: int = 0) -> Any:
        if self._left == 0:
            await asyncio.Event().wait()
        self._left -= 1
        return await asyncio.get_running_loop().run_in_executor(self._thread, function, *args)


def _execution(engine: OneThread, folder: Path) -> tuple[Execution, list[News]]:
    told: list[News] = []
    return Execution(STUDY, cast(Engine, engine), told.append, Checkpoints(folder)), told


def test_a_short_run_tells_every_point_and_leaves_no_checkpoint(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # Short on any machine, however long its first compilation.
    monkeypatch.setattr("server.execution._SAVING_INTERVAL_S", 600.0)

    async def check() -> None:
        execution, told = _execution(OneThread(), tmp_path / "kept")
        result = await execution.conduct()
        execution.close()
        last = {(p["variant"], p["point"]): p for news in told for p in news.points}
        for point in result.found():
            assert last[point.variant, point.point] == point.summary()
        assert told[-1].progress["fraction"] == 1.0
        assert told[-1].progress["points_done"] == len(last)
        distances, _ = result.axes.named()["map_distance_km"]
        assert sum(rows["rows"] for news in told for rows in news.maps) == len(distances)
        assert not (tmp_path / "kept").exists()

    run(check())


@pytest.mark.parametrize("tasks", [2, 4])
def test_what_was_told_last_is_what_a_cancelled_run_keeps(tmp_path: Path, tasks: int) -> None:
    async def check() -> None:
        execution, told = _execution(OneThread(tasks), tmp_path)
        conduct = asyncio.create_task(execution.conduct())
        while not told or told[-1].progress["realizations"] == 0:
            await asyncio.sleep(0.01)
        conduct.cancel()
        await asyncio.wait([conduct])
        execution.close()
        state = StudyState(STUDY)
        for variant, point, arrays in Checkpoints(tmp_path).load():
            state.restore(variant, point, arrays)
        assert state.progress().realizations == told[-1].progress["realizations"] > 0

    run(check())
