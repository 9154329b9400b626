"""Carrying one study out on the engine: hand tasks out, take outcomes in, tell, keep.

The server's runs and ``crossdip run`` are both this.
"""

import asyncio
import base64
import contextlib
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Any, TypeVar

from server.checkpoints import Arrays, Checkpoints
from server.engine import Engine
from server.stream import rounded
from solver.experiment import Study
from solver.result import StudyResult
from solver.study import MapRows, StudyState, execute, places
from solver.task import Task

_SETTLING_S = 1.0
_TELLING_INTERVAL_S = 0.1
_SAVING_INTERVAL_S = 2.0
"""What a crash of the server may cost."""

T = TypeVar("T")
Outcome = tuple[Task, Any]
Place = tuple[int, int]
"""Variant and point."""


@dataclass(frozen=True)
class News:
    """What changed since the last news, JSON-able."""

    progress: dict[str, Any]
    points: list[dict[str, Any]] = field(default_factory=list)
    maps: list[dict[str, Any]] = field(default_factory=list)


class Pace:
    """Time left, from the rate at which the fraction grew since this start."""

    def __init__(self) -> None:
        self._start_s = time.monotonic()
        self._start_fraction: float | None = None

    def seconds_left(self, fraction: float) -> float | None:
        """None until there is a rate to measure."""
        moment_s = time.monotonic()
        if self._start_fraction is None:
            self._start_s, self._start_fraction = moment_s, fraction
        gained = fraction - self._start_fraction
        elapsed_s = moment_s - self._start_s
        if gained <= 0.0 or elapsed_s < _SETTLING_S:
            return None
        return (1.0 - fraction) * elapsed_s / gained


class Execution:
    """One study under way."""

    def __init__(
        self,
        study: Study,
        engine: Engine,
        tell: Callable[[News], None],
        checkpoints: Checkpoints | None = None,
    ) -> None:
        self._study = study
        self._engine = engine
        self._tell = tell
        self._checkpoints = checkpoints
        self._pace = Pace()
        # StudyState is not thread-safe: one thread, off the event loop, owns it.
        self._thread = ThreadPoolExecutor(1, thread_name_prefix="study")
        self._state: StudyState | None = None
        self._inbox: asyncio.Queue[Outcome | Exception] = asyncio.Queue()
        self._errands: set[asyncio.Task[None]] = set()
        self._outstanding = 0
        # The study's thread has these three to itself, as it has the state.
        self._maps: list[dict[str, Any]] = []
        self._untold: set[Place] = set()
        self._unsaved: set[Place] = set()
        self._changed = asyncio.Event()
        self._ending = asyncio.Event()
        self.live_map: dict[str, int] | None = None

    async def ask(self, question: Callable[[StudyState], T]) -> T | None:
        """The answer of the study's state as it is now; None before it exists."""
        state = self._state
        if state is None:
            return None
        return await asyncio.get_running_loop().run_in_executor(self._thread, question, state)

    async def conduct(self) -> StudyResult:
        """Run to the end and return the result.

        Raises what a task raised, or OSError when a checkpoint cannot be written. When it does
        not come to its end, tasks are withdrawn and every whole round taken in is on disk.
        """
        beside: list[asyncio.Task[None]] = []
        try:
            state, ready = await self._begin()
            beside.append(asyncio.create_task(self._tell_as_it_changes(state)))
            if self._checkpoints is not None:
                beside.append(
                    asyncio.create_task(self._save_now_and_then(state, self._checkpoints))
                )
            self._hand_out(ready)
            while self._outstanding:
                outcomes = await self._next_outcomes()
                self._hand_out(await self._in_thread(self._absorb, state, outcomes))
                self._changed.set()
            if not state.finished:
                raise RuntimeError("the study ran out of tasks before it was finished")
            return await self._in_thread(self._result, state)
        finally:
            for errand in self._errands:
                errand.cancel()
            self._ending.set()
            self._changed.set()
            await asyncio.gather(*beside)

    def close(self) -> None:
        """Give the thread up; nothing may be asked any more."""
        self._state = None
        self._thread.shutdown(wait=False)

    async def _begin(self) -> tuple[StudyState, list[Task]]:
        state = await self._in_thread(StudyState, self._study)
        if self._checkpoints is not None:
            for variant, point, arrays in await asyncio.to_thread(list, self._checkpoints.load()):
                await self._in_thread(state.restore, variant, point, arrays)
        ready = await self._in_thread(state.ready)
        self._state = state
        self._untold.update(state.chains)
        self._tell(await self._in_thread(self._news, state))
        return state, ready

    def _hand_out(self, tasks: list[Task]) -> None:
        self._outstanding += len(tasks)
        for task in tasks:
            errand = asyncio.create_task(self._errand(task))
            self._errands.add(errand)
            errand.add_done_callback(self._errands.discard)

    async def _errand(self, task: Task) -> None:
        try:
            outcome = await self._engine.run(execute, task, priority=task.priority)
        except Exception as error:
            self._inbox.put_nowait(error)
        else:
            self._inbox.put_nowait((task, outcome))

    async def _next_outcomes(self) -> list[Outcome]:
        """Everything that has come back, at least one."""
        messages = [await self._inbox.get()]
        while not self._inbox.empty():
            messages.append(self._inbox.get_nowait())
        outcomes = []
        for message in messages:
            if isinstance(message, Exception):
                raise message
            outcomes.append(message)
        self._outstanding -= len(outcomes)
        return outcomes

    def _absorb(self, state: StudyState, outcomes: list[Outcome]) -> list[Task]:
        ready: list[Task] = []
        for task, outcome in outcomes:
            ready += state.absorb(task, outcome)
            self._untold.update(state.touched(task))
            self._unsaved.update(places(task))
            rows = state.live_map_rows(task, outcome)
            if rows is not None:
                self.live_map = {"variant": rows.variant, "point": rows.point}
                self._maps.append(map_event(rows))
        return ready

    def _news(self, state: StudyState) -> News:
        """What has not been told yet."""
        maps, self._maps = self._maps, []
        untold, self._untold = self._untold, set()
        found = [result for place in untold if (result := state.point(*place)) is not None]
        return News(self._progress(state), [result.summary() for result in found], maps)

    def _result(self, state: StudyState) -> StudyResult:
        # From here on the result is what there is to save.
        self._unsaved.clear()
        return state.result()

    def _next_checkpoint(self, state: StudyState) -> tuple[Place, Arrays | None] | None:
        if not self._unsaved:
            return None
        place = self._unsaved.pop()
        return place, state.checkpoint(*place)

    def _progress(self, state: StudyState) -> dict[str, Any]:
        progress = state.progress()
        return {
            "fraction": rounded(progress.fraction),
            "realizations": progress.realizations,
            "points_done": progress.points_done,
            "points_total": progress.points_total,
            "seconds_left": rounded(self._pace.seconds_left(progress.fraction), 3),
        }

    async def _tell_as_it_changes(self, state: StudyState) -> None:
        last = False
        while not last:
            await self._changed.wait()
            self._changed.clear()
            last = self._ending.is_set()
            self._tell(await self._in_thread(self._news, state))
            await self._pause(_TELLING_INTERVAL_S)

    async def _save_now_and_then(self, state: StudyState, checkpoints: Checkpoints) -> None:
        """Write checkpoints beside the work, the last ones at its end; a failure ends the run."""
        last = False
        try:
            while not last:
                await self._pause(_SAVING_INTERVAL_S)
                last = self._ending.is_set()
                while unsaved := await self._in_thread(self._next_checkpoint, state):
                    place, arrays = unsaved
                    if arrays is not None:
                        await asyncio.to_thread(checkpoints.save, *place, arrays)
        except OSError as error:
            self._inbox.put_nowait(error)

    async def _pause(self, duration_s: float) -> None:
        """Wait, but not beyond the end of the work."""
        with contextlib.suppress(TimeoutError):
            await asyncio.wait_for(self._ending.wait(), duration_s)

    async def _in_thread(self, function: Callable[..., T], *values: Any) -> T:
        loop = asyncio.get_running_loop()
        return await loop.run_in_executor(self._thread, function, *values)


def map_event(rows: MapRows) -> dict[str, Any]:
    """The ``map`` event of the stream: rows as base64 of 8-bit integers."""
    levels = rows.picture.data
    return {
        "variant": rows.variant,
        "point": rows.point,
        "first_row": rows.first_row,
        "rows": int(levels.shape[1]),
        "columns": int(levels.shape[2]),
        "length_km": rows.length_km,
        "intensity_scale_w": rounded(rows.picture.intensity_scale_w),
        "data": base64.b64encode(levels.tobytes()).decode("ascii"),
    }
