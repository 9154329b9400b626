"""What is handed to workers and what they hand back: plain data that pickles small."""

from dataclasses import dataclass, field
from typing import ClassVar

import numpy as np

from solver.experiment import Experiment
from solver.grid import Field, Real
from solver.result import LinearRegime, Picture


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
class RoundTask(Task):
    """Realizations ``first`` to ``first + count − 1`` of a point, on a time step divided by
    ``refinement``; ``steps`` is None in the first round, which finds them, ``fewest`` or more."""

    kind: ClassVar[str] = "round"
    first: int
    count: int
    refinement: int
    steps: int | None
    fewest: int = 1


@dataclass(frozen=True)
class MapTask(Task):
    """Part ``part`` of the map of realization 0, on a time step divided by ``refinement``;
    ``field`` is None at the launch."""

    kind: ClassVar[str] = "map"
    part: int
    refinement: int = 1
    field: Field | None = None


@dataclass(frozen=True)
class Findings:
    """What the first round finds out for the whole point."""

    steps: int
    discretization_error: float
    picture: Picture
    linear: LinearRegime


@dataclass(frozen=True)
class RoundOutcome:
    """Features of a round's realizations, or the outcome that ended it early.

    ``steps_too_long`` asks for the point to be begun again with more than ``steps`` steps.
    blocks: (realizations, block features); sums: (2, mean features).
    """

    outcome: str
    advice: str = ""
    blocks: Real = field(default_factory=lambda: np.zeros((0, 0)))
    sums: Real = field(default_factory=lambda: np.zeros((2, 0)))
    transforms: int = 0
    steps: int = 0
    findings: Findings | None = None


@dataclass(frozen=True)
class MapPart:
    """Rows of a map from ``first_row`` on, and the field to go on with (None: the last part).

    Without a picture where the field did not fit its grid, as ``outcome`` then says.
    """

    outcome: str
    first_row: int = 0
    picture: Picture | None = None
    field: Field | None = None
