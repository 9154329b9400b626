"""Event logs that can be followed live and replayed from any point.

All of it belongs to the event loop's thread.
"""

import asyncio
import json
import math
import secrets
from collections import OrderedDict
from collections.abc import AsyncIterator, Callable
from typing import Any

from fastapi.sse import ServerSentEvent

RUN_LOG_BYTES = 12_000_000
LIBRARY_LOG_BYTES = 500_000
CLOSED_LOGS_KEPT = 16
TRIM_DELAY_S = 30.0
POINT_INTERVAL_S = 0.1
PROGRESS_INTERVAL_S = 0.25


def rounded(tree: Any, digits: int = 7) -> Any:
    """JSON-able copy with floats cut to some significant digits and non-finite ones to null."""
    if isinstance(tree, float):
        return float(f"{tree:.{digits}g}") if math.isfinite(tree) else None
    if isinstance(tree, dict):
        return {name: rounded(value, digits) for name, value in tree.items()}
    if isinstance(tree, list | tuple):
        return [rounded(value, digits) for value in tree]
    return tree


class EventLog:
    """Numbered events of one subject, bounded in bytes, oldest dropped first."""

    def __init__(self, epoch: str, limit_bytes: int) -> None:
        self._epoch = epoch
        self._limit_bytes = limit_bytes
        self._events: list[tuple[str, str]] = []
        self._first = 1
        self._size_bytes = 0
        self._changed = asyncio.Event()
        self.closed = False
        self.followers = 0

    @property
    def last_id(self) -> str:
        """Identifier of the newest event, for Last-Event-ID."""
        return f"{self._epoch}-{self._end - 1}"

    @property
    def _end(self) -> int:
        return self._first + len(self._events)

    def publish(self, kind: str, data: dict[str, Any]) -> None:
        """Append one event and wake the followers."""
        text = json.dumps(data, separators=(",", ":"), allow_nan=False)
        self._events.append((kind, text))
        self._size_bytes += len(text)
        while self._size_bytes > self._limit_bytes and len(self._events) > 1:
            self._drop(1)
        self._wake()

    def close(self) -> None:
        """Let followers end once they have read everything."""
        self.closed = True
        self._wake()

    def reopen(self) -> None:
        """Take events again, after a run is continued."""
        self.closed = False

    def trim(self) -> None:
        """Give up the history of a closed log; who comes late is told to read the view."""
        if self.closed and len(self._events) > 1:
            self._drop(len(self._events) - 1)

    async def follow(self, after: str = "") -> AsyncIterator[ServerSentEvent]:
        """Events behind ``after``, then live ones, until the log is closed.

        What cannot be replayed is announced by one ``reset``, after which only news follow.
        """
        self.followers += 1
        try:
            async for event in self._events_after(after):
                yield event
        finally:
            self.followers -= 1

    async def _events_after(self, after: str) -> AsyncIterator[ServerSentEvent]:
        position = self._position(after)
        if position is None:
            position = self._end
            yield ServerSentEvent(event="reset", raw_data="{}", id=self.last_id)
            if self.closed and self._events:
                position = self._end - 1
        elif self.closed and position >= self._end:
            position = max(self._first, self._end - 1)
        while True:
            if position < self._first:
                position = self._end
                yield ServerSentEvent(event="reset", raw_data="{}", id=self.last_id)
            changed = self._changed
            while self._first <= position < self._end:
                kind, text = self._events[position - self._first]
                yield ServerSentEvent(event=kind, raw_data=text, id=f"{self._epoch}-{position}")
                position += 1
            if position < self._first:
                continue
            if self.closed:
                return
            await changed.wait()

    def _position(self, after: str) -> int | None:
        """Number of the first event to send; None when the past is gone."""
        if not after:
            return 1 if self._first == 1 else None
        epoch, _, number = after.rpartition("-")
        if epoch != self._epoch or not number.isascii() or not number.isdigit():
            return None
        position = int(number[:15]) + 1
        return position if self._first <= position <= self._end else None

    def _drop(self, count: int) -> None:
        self._size_bytes -= sum(len(text) for _, text in self._events[:count])
        del self._events[:count]
        self._first += count

    def _wake(self) -> None:
        self._changed.set()
        self._changed = asyncio.Event()


class Board:
    """The logs of all runs, and one of everything for the Library."""

    def __init__(self) -> None:
        self._epoch = secrets.token_hex(4)
        self._logs: OrderedDict[str, EventLog] = OrderedDict()
        self.library = EventLog(self._epoch, LIBRARY_LOG_BYTES)

    @property
    def followers(self) -> int:
        """Streams open now."""
        return sum(log.followers for log in (self.library, *self._logs.values()))

    def log(self, run_id: str) -> EventLog:
        """The run's log, made when it is first asked for."""
        log = self._logs.get(run_id)
        if log is None:
            log = self._logs[run_id] = EventLog(self._epoch, RUN_LOG_BYTES)
        self._logs.move_to_end(run_id)
        closed = [name for name, entry in self._logs.items() if entry.closed and name != run_id]
        for name in closed[:-CLOSED_LOGS_KEPT]:
            del self._logs[name]
        return log

    def known(self, run_id: str) -> bool:
        """True when the run has said something since the server started."""
        return run_id in self._logs

    def finish(self, run_id: str) -> None:
        """Close a run's log; its history goes once present followers have had it."""
        log = self.log(run_id)
        log.close()
        asyncio.get_running_loop().call_later(TRIM_DELAY_S, log.trim)

    def close(self) -> None:
        """End every stream, so that the server can stop."""
        for log in (self.library, *self._logs.values()):
            log.close()


class Throttle:
    """Calls ``emit`` at once, then no more often than the interval; the last call is kept."""

    def __init__(self, interval_s: float, emit: Callable[[], None]) -> None:
        self._interval_s = interval_s
        self._emit = emit
        self._last_s = -math.inf
        self._timer: asyncio.TimerHandle | None = None

    def call(self) -> None:
        """Emit now, or as soon as the interval allows."""
        loop = asyncio.get_running_loop()
        wait_s = self._last_s + self._interval_s - loop.time()
        if wait_s <= 0.0:
            self.flush()
        elif self._timer is None:
            self._timer = loop.call_later(wait_s, self.flush)

    def flush(self) -> None:
        """Emit now, whatever the interval says."""
        self.stop()
        self._last_s = asyncio.get_running_loop().time()
        self._emit()

    def stop(self) -> None:
        """Forget a pending emission."""
        if self._timer is not None:
            self._timer.cancel()
            self._timer = None


class RunFeed:
    """Publishes one run's news, several points to an event and few progress ticks a second."""

    def __init__(self, log: EventLog) -> None:
        self._log = log
        self._ended = False
        self._points: dict[tuple[int, int], dict[str, Any]] = {}
        self._progress: dict[str, Any] | None = None
        self._point_throttle = Throttle(POINT_INTERVAL_S, self._emit_points)
        self._progress_throttle = Throttle(PROGRESS_INTERVAL_S, self._emit_progress)

    def points(self, summaries: list[dict[str, Any]]) -> None:
        """New summaries of points; a newer one of the same point replaces an unsent one."""
        for summary in summaries:
            self._points[summary["variant"], summary["point"]] = summary
        if summaries:
            self._point_throttle.call()

    def progress(self, progress: dict[str, Any]) -> None:
        """How far the run is."""
        self._progress = progress
        self._progress_throttle.call()

    def map_rows(self, rows: dict[str, Any]) -> None:
        """Rows added to the evolution map."""
        self._publish("map", rows)

    def flush(self) -> None:
        """Send what waits."""
        self._point_throttle.stop()
        self._progress_throttle.stop()
        self._emit_points()
        self._emit_progress()

    def end(self) -> None:
        """Send what waits and nothing more: the state that ends a run is its last event."""
        self.flush()
        self._ended = True

    def _emit_points(self) -> None:
        if self._points:
            batch, self._points = list(self._points.values()), {}
            self._publish("point", {"points": batch})

    def _emit_progress(self) -> None:
        if self._progress is not None:
            progress, self._progress = self._progress, None
            self._publish("progress", progress)

    def _publish(self, kind: str, data: dict[str, Any]) -> None:
        if not self._ended:
            self._log.publish(kind, data)
