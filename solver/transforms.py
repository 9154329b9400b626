"""The Fourier transforms of a propagation, behind one small interface.

FFTW's fast plans come from timing candidates, and two plans may differ in the last bit. A
study must give the same bits on every worker, so a plan is made once on a machine and kept in
the user's cache folder as FFTW "wisdom"; whoever comes second uses the first one's plan.
"""

import os
import pickle
import tempfile
from collections.abc import Iterator
from functools import lru_cache
from pathlib import Path
from typing import Any

import llvmlite.binding as llvm
import numpy as np
import pyfftw
from scipy import fft

from solver.experiment import Precision
from solver.grid import Field

COMPLEX: dict[Precision, type[np.complexfloating[Any, Any]]] = {
    "single": np.complex64,
    "double": np.complex128,
}
BATCH_SAMPLES = 2**14
"""Samples of each component in one batch, so that field and operator stay in a core's cache."""
MOST_TOGETHER = 8
"""Realizations in one batch at most."""


def batch_size(samples: int) -> int:
    """Realizations that are transformed together."""
    return min(MOST_TOGETHER, max(1, BATCH_SAMPLES // samples))


def batches(rows: range, samples: int) -> Iterator[range]:
    """Parts of the rows to transform together, their sizes powers of two so that plans are few."""
    start = rows.start
    while start < rows.stop:
        size = min(batch_size(samples), 1 << (rows.stop - start).bit_length() - 1)
        yield range(start, start + size)
        start += size


def _cache_folder() -> Path:
    base = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    return Path(base) / "crossdip" / "wisdom"


class Transforms:
    """In-place transforms of ``buffer``, complex, shape (realizations, 2, samples).

    Neither direction is scaled: forward then inverse multiplies by ``samples``.
    """

    def __init__(self, realizations: int, samples: int, precision: Precision) -> None:
        shape = (realizations, 2, samples)
        self.buffer = pyfftw.zeros_aligned(shape, dtype=COMPLEX[precision])
        wisdom = _cache_folder() / (
            f"{llvm.get_host_cpu_name()}-{pyfftw.__version__}-{precision}-{realizations}x{samples}"
        )
        if not self._adopt(wisdom):
            pyfftw.forget_wisdom()
            self._plan("FFTW_MEASURE")
            if not _publish(wisdom) and not self._adopt(wisdom):
                self._plan("FFTW_ESTIMATE")  # not timed, and so the same everywhere

    def _adopt(self, wisdom: Path) -> bool:
        """Plan as another process did; False when nobody has."""
        try:
            plans = pickle.loads(wisdom.read_bytes())
        except (OSError, pickle.UnpicklingError, EOFError):
            return False
        pyfftw.forget_wisdom()
        pyfftw.import_wisdom(plans)
        self._plan("FFTW_MEASURE")
        return True

    def _plan(self, effort: str) -> None:
        self._forward, self._inverse = (
            pyfftw.FFTW(self.buffer, self.buffer, axes=(2,), direction=direction, flags=(effort,))
            for direction in ("FFTW_FORWARD", "FFTW_BACKWARD")
        )

    def forward(self) -> None:
        """Time to frequency, e^{−iωt}."""
        self._forward.execute()

    def inverse(self) -> None:
        """Frequency to time, times ``samples``."""
        self._inverse.execute()


def _publish(wisdom: Path) -> bool:
    """Keep this process's plan for all; False when another was first or the disk refuses."""
    try:
        wisdom.parent.mkdir(parents=True, exist_ok=True)
        with tempfile.NamedTemporaryFile(dir=wisdom.parent) as draft:
            draft.write(pickle.dumps(pyfftw.export_wisdom()))
            draft.flush()
            os.link(draft.name, wisdom)
    except OSError:
        return False
    return True


@lru_cache(maxsize=16)
def transforms(realizations: int, samples: int, precision: Precision) -> Transforms:
    """The planned transforms of a shape, one set per process: not to be held across calls."""
    return Transforms(realizations, samples, precision)


def resampled(field: Field, samples: int) -> Field:
    """The same band-limited light on another number of samples of its window.

    field: complex, shape (..., samples now), both numbers even; bins beyond the smaller band are
    filled with zeros or left out. Returns the given array where the numbers are equal.
    """
    have = field.shape[-1]
    if have == samples:
        return field
    spectrum = fft.fft(field, norm="forward")
    half = min(have, samples) // 2
    made = np.zeros((*field.shape[:-1], samples), dtype=field.dtype)
    made[..., :half], made[..., -half:] = spectrum[..., :half], spectrum[..., -half:]
    return np.asarray(fft.ifft(made, norm="forward"))
