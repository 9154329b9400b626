"""Loaded by every worker process as it starts, on this machine or another."""

import hashlib
import os
from functools import cache
from importlib import metadata
from importlib.util import find_spec
from pathlib import Path
from typing import Any

from solver import experiment

OFFER = "crossdip "
"""How the name of the resource begins that workers offer and tasks on a foreign cluster need."""


@cache
def offer() -> str:
    """What a worker of this installation offers, for a person to read and schedulers to compare.

    Besides the version it names the solver's source, so that only workers which compute the same
    are given a study's tasks, between releases too.
    """
    try:
        version = metadata.version("crossdip")
    except metadata.PackageNotFoundError:
        version = "from source"
    source = hashlib.sha256()
    for path in sorted(Path(experiment.__file__).parent.glob("*.py")):
        source.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    digest = source.hexdigest()[:8]
    # Whether transforms are planned decides last bits; the web process is not to load them.
    library = "FFTW" if find_spec("pyfftw") else "scipy"
    return f"{OFFER}{version} (numerics {experiment.NUMERICS}, solver {digest}, {library})"


def dask_setup(worker: Any) -> None:
    """Step behind interactive programs, and offer this version, before the worker registers."""
    # A page is prompt while every core computes.
    os.nice(5)
    # One at a time, even on a worker with several threads: a task takes a core to itself.
    worker.state.total_resources[offer()] = 1
    worker.state.available_resources[offer()] = 1


def under_way(dask_worker: Any) -> list[str]:
    """Keys of the tasks that run on this worker's threads at this moment."""
    return list(dask_worker.active_threads.copy().values())
