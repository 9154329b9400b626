"""The engine on a foreign scheduler that goes away and comes back, and on its own workers."""

import asyncio
import os
import resource
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pytest

from server.engine import Engine
from server.settings import Cluster
from tests.asynchronous import run
from tests.doubling import double_slowly


def _fail() -> None:
    raise ValueError("on purpose")


def _environment_of_worker() -> dict[str, str | None]:
    names = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")
    return {name: os.environ.get(name) for name in names}


PAGES_OF_ONE_ARRAY = 2**24 // resource.getpagesize()


def _pages_asked_of_the_system() -> int:
    """For the tenth array and the following of a row that are each given up at once."""
    for count in range(20):
        if count == 10:
            before = resource.getrusage(resource.RUSAGE_SELF).ru_minflt
        np.ones(2**24, np.uint8)
    return resource.getrusage(resource.RUSAGE_SELF).ru_minflt - before


@contextmanager
def _scheduler(port: int) -> Iterator[None]:
    """A Dask scheduler with one worker, as an operator would run them."""
    code = (
        "import asyncio, distributed\n"
        "async def main():\n"
        f"    async with distributed.Scheduler(host='127.0.0.1', port={port},\n"
        "            dashboard=False, dashboard_address='127.0.0.1:0') as scheduler:\n"
        "        async with distributed.Worker(scheduler.address, nthreads=1,\n"
        "                preload=['server.worker']):\n"
        "            print('up', flush=True)\n"
        "            await scheduler.finished()\n"
        "asyncio.run(main())\n"
    )
    process = subprocess.Popen(
        [sys.executable, "-c", code],
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        cwd=Path(__file__).parents[2],
        text=True,
    )
    try:
        assert process.stdout is not None
        assert process.stdout.readline() == "up\n"
        yield
    finally:
        process.kill()
        process.wait()
        if process.stdout is not None:
            process.stdout.close()


async def _until(condition: Callable[[], bool]) -> None:
    while not condition():
        await asyncio.sleep(0.02)


def _free_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as probe:
        return int(probe.getsockname()[1])


# The client leaves the sockets of a lost scheduler to the garbage collector.
@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")
@pytest.mark.filterwarnings("ignore::ResourceWarning")
def test_a_scheduler_that_comes_back_gets_the_pending_tasks_again(tmp_path: Path) -> None:
    port = _free_port()

    async def check() -> None:
        engine = Engine(1, tmp_path, Cluster(f"tcp://127.0.0.1:{port}"))
        engine.start()
        tasks = [asyncio.create_task(engine.run(double_slowly, number)) for number in range(100)]
        with _scheduler(port):
            await _until(lambda: engine.tasks_done >= 5)
            await _until(lambda: (engine.condition, engine.workers) == ("ready", 1))
        assert engine.tasks_done < 100
        await _until(lambda: engine.condition == "lost")
        with _scheduler(port):
            assert await asyncio.gather(*tasks) == [2 * number for number in range(100)]
            await engine.stop()

    run(check())


def test_own_workers_are_capped_failures_come_through_and_cancelled_tasks_go(
    tmp_path: Path,
) -> None:
    async def check() -> None:
        engine = Engine(1, tmp_path)
        engine.start()
        try:
            assert set((await engine.run(_environment_of_worker)).values()) == {"1"}
            assert await engine.run(_pages_asked_of_the_system) < PAGES_OF_ONE_ARRAY
            with pytest.raises(ValueError, match="on purpose"):
                await engine.run(_fail)
            many = [asyncio.create_task(engine.run(double_slowly, n)) for n in range(200)]
            await asyncio.sleep(0.3)
            for task in many:
                task.cancel()
            await asyncio.gather(*many, return_exceptions=True)
            start_s = time.monotonic()
            assert await engine.run(double_slowly, 4) == 8
            assert time.monotonic() - start_s < 3.0
        finally:
            await engine.stop()
        assert engine.workers == 0

    run(check())


def test_cancelling_while_values_are_fetched_leaves_later_tasks_alone(tmp_path: Path) -> None:
    """The client fetches the values of several tasks together, the cancelled ones' among them."""

    async def check() -> None:
        engine = Engine(2, tmp_path)
        engine.start()
        try:
            for turns in range(40):
                many = [asyncio.create_task(engine.run(abs, -number)) for number in range(20)]
                await asyncio.wait(many, return_when=asyncio.FIRST_COMPLETED)
                for _ in range(turns % 5):
                    await asyncio.sleep(0)
                for task in many:
                    task.cancel()
                await asyncio.gather(*many, return_exceptions=True)
                assert await asyncio.create_task(engine.run(abs, -4)) == 4
        finally:
            await engine.stop()

    run(check())
