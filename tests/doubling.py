"""A slow task in a module of its own, so that every worker process can import it."""

import time


def double_slowly(number: int) -> int:
    """Twice the number, after 50 ms."""
    time.sleep(0.05)
    return 2 * number
