"""Event logs: replay, reset, bounds, pace."""

import asyncio
import json
import math
from typing import Any

from hypothesis import given
from hypothesis import strategies as st

from server.stream import Board, EventLog, RunFeed, rounded
from tests.asynchronous import run


async def _read(log: EventLog, after: str = "") -> list[tuple[str, str]]:
    return [(str(event.event), str(event.raw_data)) async for event in log.follow(after)]


def _filled(count: int, limit_bytes: int = 10_000) -> EventLog:
    log = EventLog("epoch", limit_bytes)
    for number in range(count):
        log.publish("tick", {"n": number})
    return log


@given(st.integers(1, 30), st.data())
def test_a_reader_who_comes_back_gets_exactly_what_it_missed(count: int, data: Any) -> None:
    seen = data.draw(st.integers(0, count - 1))

    async def check() -> None:
        log = _filled(count)
        log.close()
        events = await _read(log, f"epoch-{seen}")
        assert events == [("tick", f'{{"n":{number}}}') for number in range(seen, count)]

    run(check())


def test_an_unknown_or_dropped_past_is_announced_once() -> None:
    async def check() -> None:
        log = _filled(50, limit_bytes=60)
        log.close()
        for after in ("other-3", "epoch-1", "epoch-999", "epoch-x", "nonsense", ""):
            assert await _read(log, after) == [("reset", "{}"), ("tick", '{"n":49}')]

    run(check())


def test_who_comes_after_the_end_is_told_the_last_state() -> None:
    async def check() -> None:
        log = _filled(3)
        log.close()
        assert await _read(log, log.last_id) == [("tick", '{"n":2}')]
        log.trim()
        assert await _read(log, "epoch-1") == [("reset", "{}"), ("tick", '{"n":2}')]

    run(check())


def test_live_events_reach_every_follower_and_a_slow_one_is_reset() -> None:
    async def check() -> None:
        log = EventLog("epoch", 200)
        readers = [asyncio.create_task(_read(log)) for _ in range(3)]
        slow = log.follow()
        log.publish("tick", {"n": 0})
        assert (await anext(slow)).event == "tick"
        await asyncio.sleep(0)
        assert log.followers == 4
        for number in range(1, 100):
            log.publish("tick", {"n": number})
            await asyncio.sleep(0)
        log.close()
        for events in await asyncio.gather(*readers):
            assert [text for _, text in events] == [f'{{"n":{number}}}' for number in range(100)]
        assert [event.event async for event in slow] == ["reset"]
        assert log.followers == 0

    run(check())


def test_memory_of_a_log_is_bounded() -> None:
    log = _filled(10_000, limit_bytes=1000)
    assert log._size_bytes <= 1000
    assert len(log._events) < 200


def test_points_share_events_and_the_last_word_is_never_lost() -> None:
    async def check() -> None:
        log = EventLog("epoch", 10**6)
        feed = RunFeed(log)
        for number in range(200):
            feed.points([{"variant": 0, "point": number % 5, "value": number}])
            feed.progress({"fraction": number / 200})
        await asyncio.sleep(0.3)
        log.close()
        events = [event async for event in log.follow()]
        assert len(events) <= 5
        latest: dict[int, int] = {}
        for kind, text in log._events:
            if kind == "point":
                for point in json.loads(text)["points"]:
                    latest[point["point"]] = point["value"]
        assert latest == {0: 195, 1: 196, 2: 197, 3: 198, 4: 199}
        assert log._events[-1] == ("progress", '{"fraction":0.995}')

    run(check())


def test_closed_logs_are_given_up_but_open_ones_stay() -> None:
    async def check() -> None:
        board = Board()
        board.log("open").publish("state", {})
        for number in range(50):
            board.finish(f"{number}")
        board.log("new")
        assert board.known("open")
        assert board.known("49")
        assert not board.known("0")

    run(check())


@given(st.floats())
def test_rounding_keeps_seven_digits_and_drops_what_json_lacks(value: float) -> None:
    (cut,) = rounded([value])
    if math.isfinite(value):
        assert math.isclose(cut, value, rel_tol=1e-6)
        assert len(f"{cut!r}".split("e")[0].replace(".", "").strip("-0")) <= 7 or abs(cut) >= 1e7
    else:
        assert cut is None
