"""Sentences about runs: what one is called at first, and why one failed."""

import errno
import os
import sqlite3

from server.errors import ServerError
from solver.experiment import Study, numeric_parameters

_FULL_DISK = {errno.ENOSPC, errno.EDQUOT}


def title_of(study: Study) -> str:
    """A first title: what is swept and which curves are compared."""
    names = {path: (title, unit) for path, title, unit in numeric_parameters()}
    title, unit = names[study.sweep.parameter]
    curves = " · ".join(variant.name for variant in study.variants)
    span = f"{study.sweep.start:g}–{study.sweep.stop:g} {unit}".strip()
    if study.second is not None:
        other, other_unit = names[study.second.parameter]
        ends = f"{study.second.start:g}–{study.second.stop:g} {other_unit}".strip()
        span += f" × {other} {ends}"
    return f"{title} {span}: {curves}"[:200]


def is_full_disk(error: Exception) -> bool:
    """True when the disk had no room; HDF5 and SQLite say so in words only."""
    if isinstance(error, OSError):
        return error.errno in _FULL_DISK or os.strerror(errno.ENOSPC) in str(error)
    return isinstance(error, sqlite3.OperationalError) and "full" in str(error)


def explain(error: Exception) -> str:
    """What a person can do about a failed run."""
    if is_full_disk(error):
        return (
            "The disk that holds the data folder is full. Free some space, then press Continue: "
            "everything computed so far is kept."
        )
    if isinstance(error, OSError):
        return (
            f"The data folder cannot be written ({error.strerror or error}). Mend that, then "
            "press Continue: everything computed so far is kept."
        )
    if isinstance(error, ServerError):
        return error.message
    return (
        f"The computation stopped with {type(error).__name__}: {error}. Continue tries again; "
        "if it stops at the same place, the server's log has the details."
    )[:1000]
