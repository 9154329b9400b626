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
from solver.study import MapRows, StudyState, execute
from solver.task import Task

_SETTLING_S = 1.0
_SAVING_INTERVAL_S = 0.3

T = TypeVar("T")
Outcome = tuple[Task, Any]


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
        self._unsaved: dict[tuple[int, int], Arrays] = {}
        self._unsaved_some = asyncio.Event()
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

        Raises what a task raised, or OSError when a checkpoint cannot be written. When it is
        cancelled, tasks are withdrawn and every whole round taken in so far is on disk.
        """
        saver: asyncio.Task[None] | None = None
        try:
            state, ready = await self._begin()
            if self._checkpoints is not None:
                saver = asyncio.create_task(self._save_as_they_come())
            self._hand_out(ready)
            while self._outstanding:
                outcomes = await self._next_outcomes()
                ready = await self._in_thread(self._absorb, state, outcomes)
                self._hand_out(ready)
                news = await self._in_thread(self._news, state, outcomes)
                if self._unsaved:
                    self._unsaved_some.set()
                self._tell(news)
            if not state.finished:
                raise RuntimeError("the study ran out of tasks before it was finished")
            return await self._in_thread(state.result)
        finally:
            for errand in self._errands:
                errand.cancel()
            if saver is not None:
                self._ending.set()
                self._unsaved_some.set()
                await saver

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
        self._tell(await self._in_thread(self._news_of_all, state))
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
        return ready

    def _news(self, state: StudyState, outcomes: list[Outcome]) -> News:
        """Summaries and map rows of what was just taken in, checkpoints set aside."""
        maps = []
        changed = dict.fromkeys(place for task, _ in outcomes for place in state.touched(task))
        for task, outcome in outcomes:
            rows = state.live_map_rows(task, outcome)
            if rows is not None:
                self.live_map = {"variant": rows.variant, "point": rows.point}
                maps.append(map_event(rows))
        points = []
        for variant, point in changed:
            result = state.point(variant, point)
            if result is not None:
                points.append(result.summary())
            if self._checkpoints is not None:
                arrays = state.checkpoint(variant, point)
                if arrays is not None:
                    self._unsaved[variant, point] = arrays
        return News(self._progress(state), points, maps)

    def _news_of_all(self, state: StudyState) -> News:
        points = [
            result.summary()
            for variant in range(len(self._study.variants))
            for point in range(self._study.sweep.points)
            if (result := state.point(variant, point)) is not None
        ]
        return News(self._progress(state), points)

    def _progress(self, state: StudyState) -> dict[str, Any]:
        progress = state.progress()
        return {
            "fraction": rounded(progress.fraction),
            "realizations": progress.realizations,
            "points_done": progress.points_done,
            "points_total": progress.points_total,
            "seconds_left": rounded(self._pace.seconds_left(progress.fraction), 3),
        }

    async def _save_as_they_come(self) -> None:
        """Write checkpoints beside the work, now and then; a failure ends the run."""
        assert self._checkpoints is not None
        try:
            while not self._ending.is_set():
                await self._unsaved_some.wait()
                self._unsaved_some.clear()
                while self._unsaved:
                    place, arrays = self._unsaved.popitem()
                    await asyncio.to_thread(self._checkpoints.save, *place, arrays)
                with contextlib.suppress(TimeoutError):
                    await asyncio.wait_for(self._ending.wait(), _SAVING_INTERVAL_S)
        except OSError as error:
            self._inbox.put_nowait(error)

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
