"""Loaded by every local worker process as it starts."""

import os


def dask_setup(worker: object) -> None:
    """Step behind the web process, so that pages stay prompt while every core computes."""
    os.nice(5)
