"""Running coroutines in tests, whatever else the test process does with event loops."""

import asyncio
from collections.abc import Coroutine
from concurrent.futures import ThreadPoolExecutor

from tests.serving import TIMEOUT_S


def run(coroutine: Coroutine[object, object, None]) -> None:
    """Run to the end in a thread of its own: the browser tests keep a loop in the main one."""
    with ThreadPoolExecutor(1) as pool:
        pool.submit(asyncio.run, asyncio.wait_for(coroutine, TIMEOUT_S)).result()
