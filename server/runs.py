"""All runs: the queue, the one under way, and what can be read of each."""

import asyncio
import logging
import sqlite3
from collections import deque
from collections.abc import Coroutine
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from server.archive import Archive
from server.engine import Engine
from server.errors import Conflict, NotFound
from server.execution import Execution, News
from server.lifecycle import TERMINAL, Action, IllegalTransition
from server.picture import Points, draw
from server.schemas import RunDetail, RunRow, run_row
from server.settings import Settings
from server.storage import Counters, RunRecord, Storage, undo_until
from server.stream import Board, EventLog, RunFeed, Throttle
from server.wording import explain, title_of
from solver.experiment import Study
from solver.result import PointResult, StudyResult
from solver.study import StudyState

_log = logging.getLogger("crossdip.runs")
_LIBRARY_INTERVAL_S = 0.5
_RETRY_INTERVAL_S = 1.0


@dataclass
class LiveRun:
    """What the server knows of the run under way without asking its study."""

    study: Study
    execution: Execution
    feed: RunFeed
    library: Throttle
    progress: dict[str, Any] | None = None
    points: Points = field(default_factory=dict)
    task: asyncio.Task[StudyResult] | None = None

    @property
    def problems(self) -> int:
        """Points that ended otherwise than completed."""
        return sum(summary["outcome"] != "completed" for summary in self.points.values())


class Runs:
    """Every run of one data folder. Runs execute one at a time, first come first served."""

    def __init__(self, storage: Storage, engine: Engine, board: Board, settings: Settings) -> None:
        self._storage = storage
        self._engine = engine
        self._board = board
        self._archive = Archive(settings)
        self._queue: deque[str] = deque()
        self._queued = asyncio.Event()
        self._live: dict[str, LiveRun] = {}
        self._opening = asyncio.Lock()
        self._worker: asyncio.Task[None] | None = None
        self._beside: set[asyncio.Task[Any]] = set()
        self.realizations_done = 0

    async def open(self) -> None:
        """Sweep the folder, queue again what a stop interrupted, and begin."""
        await asyncio.to_thread(self._storage.purge)
        known = await asyncio.to_thread(self._storage.run_ids)
        await asyncio.to_thread(self._archive.sweep, known)
        for record in await asyncio.to_thread(self._storage.unfinished):
            await asyncio.to_thread(self._storage.step, record.id, "interrupt")
            self._queue.append(record.id)
        self._queued.set()
        self._worker = asyncio.create_task(self._work(), name="runs")

    async def close(self) -> None:
        """Stop; the run under way keeps its checkpoints and is taken up at the next start."""
        ending = [*self._beside, *([self._worker] if self._worker else [])]
        for task in ending:
            task.cancel()
        await asyncio.gather(*ending, return_exceptions=True)

    async def submit(self, study: Study) -> tuple[RunRow, bool]:
        """The run of a study and whether it is new; an ended one is queued again."""
        run_id = study.identity
        total = study.points_total
        new = await asyncio.to_thread(
            self._storage.add_run, run_id, title_of(study), study.model_dump_json(), total
        )
        if new:
            await self._enqueue(run_id)
        else:
            record = await asyncio.to_thread(self._storage.run, run_id)
            if record is not None and record.deleted is not None:
                await asyncio.to_thread(self._storage.restore_run, run_id)
            if record is not None and record.state in {"cancelled", "failed"}:
                await self._step(run_id, "queue")
                await self._enqueue(run_id)
        return await self.row(run_id), new

    async def rows(self, search: str, limit: int, offset: int) -> tuple[list[RunRow], int]:
        """A page of runs, newest first, and the number of all that match."""
        records, total = await asyncio.to_thread(self._storage.runs, search, limit, offset)
        return [self.row_of(record) for record in records], total

    async def row(self, run_id: str) -> RunRow:
        """One run; raises NotFound."""
        return self.row_of(await self._record(run_id))

    async def detail(self, run_id: str) -> RunDetail:
        """One run with its study."""
        record = await self._record(run_id)
        study = Study.model_validate_json(record.study)
        return RunDetail(**self.row_of(record).model_dump(), study=study.model_dump(mode="json"))

    def row_of(self, record: RunRecord) -> RunRow:
        """The row of a record, with live progress when it is under way."""
        live = self._live.get(record.id)
        if live is None or record.state != "running":
            return run_row(record)
        return run_row(record, live.progress, live.problems)

    async def rename(self, run_id: str, title: str) -> RunRow:
        """Change the title."""
        await self._record(run_id)
        await asyncio.to_thread(self._storage.rename_run, run_id, title)
        return await self._announce(run_id)

    async def cancel(self, run_id: str) -> RunRow:
        """Stop a queued or running run at once; what it has is kept."""
        await self._record(run_id)
        live = self._live.get(run_id)
        if live is not None and live.task is not None:
            # First, so that what is on record is what is kept.
            live.task.cancel()
            await asyncio.wait([live.task])
        message = "Cancelled. Continue takes it up from what it has."
        await self._step(run_id, "cancel", message, self._counters(live))
        if run_id in self._queue:
            self._queue.remove(run_id)
        return await self.row(run_id)

    async def resume(self, run_id: str) -> RunRow:
        """Queue a cancelled or failed run again."""
        await self._record(run_id)
        await self._step(run_id, "queue")
        await self._enqueue(run_id)
        return await self.row(run_id)

    async def delete(self, run_id: str) -> str:
        """Cancel if need be and hide; returns until when that can be undone."""
        record = await self._record(run_id)
        if record.state not in TERMINAL:
            await self.cancel(run_id)
        return undo_until(await asyncio.to_thread(self._storage.delete_run, run_id))

    async def restore(self, run_id: str) -> RunRow:
        """Undo a deletion."""
        if await asyncio.to_thread(self._storage.run, run_id) is None:
            raise NotFound(f"there is no run {run_id}, or its deletion has become final")
        await asyncio.to_thread(self._storage.restore_run, run_id)
        return await self._announce(run_id)

    async def log(self, run_id: str) -> EventLog:
        """The event log of a run; raises NotFound."""
        record = await self._record(run_id)
        if not self._board.known(run_id):
            log = self._board.log(run_id)
            log.publish("state", {"state": record.state, "message": record.message})
            if record.state in TERMINAL:
                log.close()
        return self._board.log(run_id)

    async def open_result(self, run_id: str) -> tuple[RunRecord, StudyResult]:
        """All that is known of a run now, finished or not; raises NotFound."""
        record = await self._record(run_id)
        live = self._live.get(run_id)
        if live is not None and record.state == "running":
            result = await live.execution.ask(StudyState.result)
            if result is not None:
                return record, result
        async with self._opening:
            result = self._archive.kept(record)
            if result is None:
                result = await asyncio.to_thread(self._archive.read, record)
            self._archive.keep(record, result)
            return record, result

    async def open_point(self, run_id: str, variant: int, point: int) -> PointResult:
        """All that is known of one point now; raises NotFound when that is nothing."""
        record = await self._record(run_id)
        study = Study.model_validate_json(record.study)
        if not (0 <= variant < len(study.curves) and 0 <= point < study.sweep.points):
            raise NotFound(
                f"the study has curves 0 to {len(study.curves) - 1} and points 0 to "
                f"{study.sweep.points - 1}"
            )
        live = self._live.get(run_id)
        found: PointResult | None = None
        if live is not None and record.state == "running":
            found = await live.execution.ask(lambda state: state.point(variant, point))
        if found is None:
            # Between the last task and the written file the execution answers no more.
            _, result = await self.open_result(run_id)
            found = result.points[variant][point]
        if found is None:
            raise NotFound("nothing has been computed for this point yet: wait for its event")
        return found

    def live_map(self, run_id: str) -> dict[str, int] | None:
        """The point whose evolution map is growing."""
        live = self._live.get(run_id)
        return live.execution.live_map if live is not None else None

    def last_event(self, run_id: str) -> str:
        """Identifier of the newest event of a run."""
        return self._board.log(run_id).last_id

    async def result_path(self, run_id: str) -> tuple[RunRecord, Path]:
        """The result file; raises Conflict while the run is not done."""
        record = await self._record(run_id)
        path = self._archive.path(run_id)
        if record.state != "done":
            raise Conflict(f"the run is {record.state}: its result file is written when it is done")
        if not path.exists():
            raise NotFound("the result file was removed from the data folder: run the study again")
        return record, path

    async def picture(self, run_id: str) -> str:
        """The small curve as SVG, of a running run as far as it is."""
        record = await self._record(run_id)
        live = self._live.get(run_id)
        if live is None:
            stored = await asyncio.to_thread(self._storage.picture, run_id)
            if stored:
                return stored
        points = live.points if live is not None else {}
        return draw(Study.model_validate_json(record.study), points)

    async def states(self) -> dict[str, int]:
        """How many runs are in each state."""
        return await asyncio.to_thread(self._storage.run_states)

    async def _work(self) -> None:
        while True:
            while not self._queue:
                self._queued.clear()
                await self._queued.wait()
            await self._engine.ready()
            if not self._queue:
                continue
            run_id = self._queue.popleft()
            try:
                await self._conduct(run_id)
            except Exception as error:
                # One run must never take the queue down with it.
                _log.exception("run %s could not be carried out", run_id)
                self._aside(self._fail_late(run_id, explain(error)))

    async def _conduct(self, run_id: str) -> None:
        record = await asyncio.to_thread(self._storage.run, run_id)
        if record is None or record.state != "queued":
            return
        try:
            study = Study.model_validate_json(record.study)
        except ValidationError:
            study = None
        if study is None or study.identity != run_id:
            await self._step(
                run_id, "fail", "An earlier version made this run: press Run to compute it afresh."
            )
            return
        checkpoints = self._archive.checkpoints(run_id)
        live = LiveRun(
            study,
            Execution(study, self._engine, partial(self._hear, run_id), checkpoints),
            RunFeed(self._board.log(run_id)),
            Throttle(_LIBRARY_INTERVAL_S, partial(self._announce_live, run_id)),
        )
        self._live[run_id] = live
        live.task = asyncio.create_task(live.execution.conduct(), name=f"run {run_id}")
        try:
            await self._step(run_id, "start")
            await asyncio.wait([live.task])
            if live.task.cancelled():
                return
            live.feed.flush()
            # The title may have changed since the run began.
            record = await self._record(run_id, deleted=True)
            await asyncio.to_thread(self._archive.write, record, live.task.result())
            await self._step(run_id, "finish", "", self._counters(live))
            self._archive.keep(await self._record(run_id, deleted=True), live.task.result())
            await asyncio.to_thread(checkpoints.remove)
        except IllegalTransition:
            # Cancelled between two steps: the table has had its say.
            return
        except Exception as error:
            _log.error("run %s failed", run_id, exc_info=error)
            await self._step(run_id, "fail", explain(error), self._counters(live))
        finally:
            live.task.cancel()
            await asyncio.gather(live.task, return_exceptions=True)
            live.library.stop()
            live.feed.flush()
            self._live.pop(run_id, None)
            live.execution.close()

    def _hear(self, run_id: str, news: News) -> None:
        live = self._live.get(run_id)
        if live is None:
            return
        if live.progress is not None:
            self.realizations_done += news.progress["realizations"] - live.progress["realizations"]
        live.progress = news.progress
        live.points |= {(point["variant"], point["point"]): point for point in news.points}
        for rows in news.maps:
            live.feed.map_rows(rows)
        live.feed.points(news.points)
        live.feed.progress(news.progress)
        live.library.call()

    def _counters(self, live: LiveRun | None) -> Counters:
        if live is None or live.progress is None:
            return {}
        names = ("fraction", "realizations", "points_done", "points_total")
        return {
            **{name: live.progress[name] for name in names},
            "problems": live.problems,
            "picture": draw(live.study, live.points),
        }

    async def _step(
        self, run_id: str, action: Action, message: str = "", counters: Counters | None = None
    ) -> None:
        step = partial(self._storage.step, run_id, action, message, counters)
        state = await asyncio.to_thread(step)
        log = self._board.log(run_id)
        log.reopen()
        live = self._live.get(run_id)
        if live is not None and state in TERMINAL:
            live.feed.end()
        log.publish("state", {"state": state, "message": message})
        if state in TERMINAL:
            self._board.finish(run_id)
        await self._announce(run_id)

    async def _announce(self, run_id: str) -> RunRow:
        """Tell the Library about a run; its row."""
        row = self.row_of(await self._record(run_id, deleted=True))
        self._board.library.publish("run", row.model_dump())
        return row

    def _announce_live(self, run_id: str) -> None:
        self._aside(self._announce(run_id))

    async def _fail_late(self, run_id: str, message: str) -> None:
        """Record a failure that could not be recorded at once, as on a disk that was full."""
        self._board.log(run_id).publish("state", {"state": "failed", "message": message})
        self._board.finish(run_id)
        while True:
            try:
                await self._step(run_id, "fail", message)
            except sqlite3.Error:
                await asyncio.sleep(_RETRY_INTERVAL_S)
            except IllegalTransition:
                return
            else:
                return

    def _aside(self, work: Coroutine[Any, Any, Any]) -> None:
        """Do something beside, until it is done or the server stops."""
        task = asyncio.create_task(work)
        self._beside.add(task)
        task.add_done_callback(self._beside.discard)

    async def _enqueue(self, run_id: str) -> None:
        if run_id not in self._queue:
            self._queue.append(run_id)
        self._queued.set()
        await self._announce(run_id)

    async def _record(self, run_id: str, *, deleted: bool = False) -> RunRecord:
        record = await asyncio.to_thread(self._storage.run, run_id)
        if record is None or (record.deleted is not None and not deleted):
            raise NotFound(f"there is no run {run_id}: look for it in the Library")
        return record
