"""The Fourier transforms of a propagation, behind one small interface with two providers.

FFTW is used wherever pyFFTW is installed; without it scipy does the same more slowly.

FFTW's fast plans come from timing candidates, and two plans may differ in the last bit. A
study must give the same bits on every worker, so a plan is made once on a machine and kept in
the user's cache folder as FFTW "wisdom"; whoever comes second uses the first one's plan.
"""

import logging
import os
import pickle
import tempfile
from collections.abc import Callable, Iterable, Iterator
from functools import lru_cache
from pathlib import Path
from typing import Any, Protocol

import llvmlite.binding as llvm
import numpy as np
from scipy import fft

from solver.experiment import Precision
from solver.grid import Field

try:
    import pyfftw
except ImportError:
    pyfftw = None

PLANNED = pyfftw is not None
"""Whether transforms are planned by FFTW, and not left to scipy."""
UNPLANNED_COST = (
    "pyFFTW is not installed: with scipy's transforms propagation takes two to three times as "
    "long (to mend it: pip install pyfftw)"
)
"""What to tell whoever starts a process that is not :data:`PLANNED`."""
if not PLANNED:
    logging.getLogger(__name__).warning(UNPLANNED_COST)

Shape = tuple[int, int, Precision]
"""Realizations, samples and precision of a batch."""
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


class Transforms(Protocol):
    """In-place transforms of ``buffer``, complex, shape (realizations, 2, samples).

    Neither direction is scaled: forward then inverse multiplies by ``samples``.
    """

    @property
    def buffer(self) -> Field:
        """What is transformed, always the same memory."""

    def forward(self) -> None:
        """Time to frequency, e^{−iωt}."""

    def inverse(self) -> None:
        """Frequency to time, times ``samples``."""


class ScipyTransforms:
    """:class:`Transforms` by scipy.fft, which needs no plans and makes the same bits anywhere."""

    def __init__(self, realizations: int, samples: int, precision: Precision) -> None:
        self.buffer: Field = np.zeros((realizations, 2, samples), dtype=COMPLEX[precision])

    def forward(self) -> None:
        """Time to frequency, e^{−iωt}."""
        self._keep(fft.fft(self.buffer, overwrite_x=True, workers=1))

    def inverse(self) -> None:
        """Frequency to time, times ``samples``."""
        self._keep(fft.ifft(self.buffer, norm="forward", overwrite_x=True, workers=1))

    def _keep(self, found: Field) -> None:
        # scipy may overwrite its input with the result, but does not promise to.
        if not np.may_share_memory(found, self.buffer):
            self.buffer[:] = found


def _wisdom_file(realizations: int, samples: int, precision: Precision) -> Path:
    base = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    name = f"{llvm.get_host_cpu_name()}-{pyfftw.__version__}-{precision}-{realizations}x{samples}"
    return Path(base) / "crossdip" / "wisdom" / name


class PlannedTransforms:
    """:class:`Transforms` by FFTW, with the plan that all processes of this machine share."""

    def __init__(self, realizations: int, samples: int, precision: Precision) -> None:
        shape = (realizations, 2, samples)
        self.buffer: Field = pyfftw.zeros_aligned(shape, dtype=COMPLEX[precision])
        wisdom = _wisdom_file(realizations, samples, precision)
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


PROVIDER: Callable[[int, int, Precision], Transforms] = (
    PlannedTransforms if PLANNED else ScipyTransforms
)
"""Makes all transforms of this process."""


@lru_cache(maxsize=24)
def transforms(realizations: int, samples: int, precision: Precision) -> Transforms:
    """The transforms of a shape, one set per process: not to be held across calls."""
    return PROVIDER(realizations, samples, precision)


def usual_shapes(narrowest: int, widest: int, precision: Precision, piloted: int) -> list[Shape]:
    """Every shape on grids of ``narrowest`` to ``widest`` samples, the quickest to plan first.

    piloted: realizations that a pilot keeps together on any grid.
    """
    shapes: list[Shape] = []
    samples = narrowest
    while samples <= widest:
        most = max(batch_size(samples), piloted)
        shapes += [(2**n, samples, precision) for n in range(most.bit_length())]
        samples *= 2
    return sorted(shapes, key=lambda shape: shape[0] * shape[1])


def plan_ahead(shapes: Iterable[Shape]) -> None:
    """See to it that this machine has plans of these shapes, which takes some 0.5 s for each new.

    Without planned transforms, or a cache folder that can be written, there is nothing to gain.
    """
    if PLANNED:
        for shape in shapes:
            if not _wisdom_file(*shape).exists():
                PlannedTransforms(*shape)


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
