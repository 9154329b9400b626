"""What is handed to workers and what they hand back: plain data that pickles small."""

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import ClassVar

import numpy as np

from solver.budget import GridUse
from solver.experiment import Amplifier, Experiment, Receiver
from solver.findings import Invariants, LinearRegime, Picture, Scales
from solver.grid import Field, Real


@dataclass(frozen=True)
class Leg:
    """From one watched distance to the next.

    samples: in the window. steps: of the whole line, were they all as long as on this leg.
    """

    samples: int
    steps: int


Schedule = tuple[Leg, ...]
"""What each leg of a line is computed with."""

CHUNK = 16
"""Realizations whose sums are kept together, on grids of ordinary size."""
APART = "apart"
"""Outcome of a point whose receiver needs shorter steps than those beside it: it goes alone."""
PILOTED = 4
"""Realizations on which the schedule is found and the discretization error is measured."""


def chunks(samples: int, first: int, count: int) -> Iterator[range]:
    """The realizations from ``first`` on, in parts that are computed and added up together.

    They begin at fixed numbers, so that the bits do not depend on how tasks are cut; parts of
    large grids are smaller, the first one never smaller than a pilot needs.
    """
    size = chunk_size(samples)
    while count > 0:
        stop = max(size, PILOTED) if first == 0 else first + size - first % size
        yield range(first, first + min(count, stop - first))
        count -= stop - first
        first = stop


def chunk_size(samples: int) -> int:
    """Realizations in a chunk, a power of two."""
    return max(1, min(CHUNK, CHUNK * 8192 // samples))


def map_parts(experiment: Experiment) -> int:
    """Parts in which the live map is computed, so that it can be watched growing."""
    return 16 if experiment.ensemble.samples > 2**14 else 4


@dataclass(frozen=True)
class Task:
    """One piece of work of a study; ``key`` is unique in it, larger ``priority`` goes first."""

    kind: ClassVar[str]
    key: str
    variant: int
    point: int
    priority: int
    experiment: Experiment = field(repr=False)


@dataclass(frozen=True)
class Beside:
    """Another point that sees the same light at the end of the line, and what it sees it with."""

    variant: int
    point: int
    preamplifier: Amplifier
    receiver: Receiver


@dataclass(frozen=True)
class RoundTask(Task):
    """Realizations ``first`` to ``first + count − 1`` of a point, in chunks whose sums are kept
    apart; ``schedule`` is None in the first round, which finds it.

    beside: further points of which the same fields tell, without being propagated again.
    """

    kind: ClassVar[str] = "round"
    first: int
    count: int
    schedule: Schedule | None
    beside: tuple[Beside, ...] = ()

    @property
    def places(self) -> list[tuple[int, int]]:
        """(variant, point) of all points that the task tells of, its own first."""
        return [(self.variant, self.point), *((b.variant, b.point) for b in self.beside)]

    def experiments(self) -> list[Experiment]:
        """Those of :attr:`places`."""
        alike = [
            self.experiment.model_copy(
                update={"preamplifier": other.preamplifier, "receiver": other.receiver}
            )
            for other in self.beside
        ]
        return [self.experiment, *alike]


@dataclass(frozen=True)
class MapTask(Task):
    """Part ``part`` of the map of realization 0; ``field`` is what the part before it ended with
    and ``leg`` how, both None at the launch."""

    kind: ClassVar[str] = "map"
    part: int
    field: Field | None = None
    leg: Leg | None = None


@dataclass(frozen=True)
class Findings:
    """What the first round finds out for the whole point."""

    schedule: Schedule
    steps: int
    discretization_error: float
    picture: Picture
    linear: LinearRegime
    invariants: Invariants
    scales: Scales
    use: GridUse


@dataclass(frozen=True)
class RoundOutcome:
    """Features of a round's realizations, or the outcome that ended it early.

    blocks: (realizations, block features); sums: (chunks, 2, mean features). transforms: of
    batches, for each chunk; seconds: what the task took, which decides nothing but how many
    realizations the next ones get. beside: the outcomes of the points beside.
    """

    outcome: str
    advice: str = ""
    blocks: Real = field(default_factory=lambda: np.zeros((0, 0)))
    sums: Real = field(default_factory=lambda: np.zeros((0, 2, 0)))
    transforms: tuple[int, ...] = ()
    seconds: float = 0.0
    findings: Findings | None = None
    beside: "tuple[RoundOutcome, ...]" = ()


@dataclass(frozen=True)
class MapPart:
    """Rows of a map from ``first_row`` on, and the field to go on with (None: the last part).

    Without a picture where the field did not fit its grid, as ``outcome`` then says.
    """

    outcome: str
    first_row: int = 0
    picture: Picture | None = None
    field: Field | None = None
    leg: Leg | None = None
