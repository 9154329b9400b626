"""A task that leaves a trace of who carried it out, importable by every worker process."""

import os
import time
from pathlib import Path
from typing import Any

from solver.study import execute
from solver.task import Task

LEAST_S = 0.03


def execute_and_count(folder: str, task: Task) -> Any:
    """Carry the task out, slowly enough to be interrupted, and note it in this process's file."""
    with (Path(folder) / str(os.getpid())).open("a") as file:
        file.write(f"{task.key}\n")
    time.sleep(LEAST_S)
    return execute(task)
