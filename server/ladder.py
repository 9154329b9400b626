"""Error against work on one core: schemes, precisions, a study's own steps, a plain script."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from types import ModuleType
from typing import TypeVar

import numpy as np

from server.yardstick import at_power, plain_fibre, timed
from solver.ensemble import Bench, pilot
from solver.experiment import Precision
from solver.grid import Field
from solver.passage import Passage
from solver.propagation import light_of, relative_error
from solver.schemes import FOURTH_ORDER, SECOND_ORDER, Scheme
from solver.task import PILOTED
from solver.track import Wave
from solver.transforms import COMPLEX, resampled

T = TypeVar("T")

MOST_REPEATS = 5
ENOUGH_S = 0.1
"""Runs are repeated until they have taken this long together."""


@dataclass(frozen=True)
class Rung:
    """One run: batch transforms, processor time in s, relative error of the field."""

    transforms: int
    cpu_s: float
    error: float


def of_transforms(rung: Rung) -> float:
    """Work as a number of transforms."""
    return rung.transforms


def of_time(rung: Rung) -> float:
    """Work as processor time, s."""
    return rung.cpu_s


def work_at(error: float, rungs: Sequence[Rung], work: Callable[[Rung], float]) -> float:
    """Work for an error, between the runs that enclose it on logarithmic axes.

    Infinite where the runs do not reach it.
    """
    falling = sorted(rungs, key=lambda rung: rung.error)
    errors = np.log([rung.error for rung in falling])
    if not errors[0] <= np.log(error) <= errors[-1]:
        return float("inf")
    return float(np.exp(np.interp(np.log(error), errors, np.log([work(r) for r in falling]))))


def _quickest(work: Callable[[], T]) -> tuple[T, float]:
    """What a run comes to, and the shortest of its processor times, s."""
    made, first_s = timed(work)
    times = [first_s]
    while len(times) < MOST_REPEATS and sum(times) < ENOUGH_S:
        times.append(timed(work)[1])
    return made, min(times)


class Ladder:
    """Runs of one field down the headline fibre with ever more steps, held against very many."""

    def __init__(self, power_mw: float, samples: int, finest: Scheme, finest_steps: int) -> None:
        self._power_mw = power_mw
        self._passage = Passage(at_power(power_mw, precision="double"), 1)
        self._samples = samples
        self._fields = resampled(self._passage.fields(range(1)), samples)
        self._track = self._passage.track(samples)
        self.truth = self._march(finest, "double", finest_steps)

    def _march(self, scheme: Scheme, precision: Precision, steps: int) -> Field:
        """The field after equal steps."""
        weights = self._track.weights(scheme, light_of(self._fields))
        pieces = self._track.pieces(weights, steps)
        wave = Wave(self._fields.astype(COMPLEX[precision]))
        outcome = self._track.march(wave, pieces, scheme, edge_limit=1.0)
        if outcome.kind != "completed":
            raise RuntimeError(outcome.advice)
        wave.settle()
        return wave.field.copy()

    def rungs(self, scheme: Scheme, precision: Precision, steps: Sequence[int]) -> list[Rung]:
        """Runs with these numbers of equal steps."""
        made = []
        for count in steps:
            self._march(scheme, precision, count)  # makes the operators
            field, taken_s = _quickest(partial(self._march, scheme, precision, count))
            spent = count * scheme.transforms_per_step
            made.append(Rung(spent, taken_s, relative_error(field, self.truth)))
        return made

    def study_rung(self) -> tuple[Rung, float]:
        """The same field as a study takes it: on the schedule that its pilot finds.

        Also its transforms as a number of those of its widest grid, each by its N log N.
        """
        bench = Bench(at_power(self._power_mw))
        passage = bench.passage
        found = pilot(bench, passage.fields(range(PILOTED)), range(PILOTED))
        if found.outcome.kind != "completed":
            raise RuntimeError(found.outcome.advice)
        launched = passage.fields(range(1))
        passage.travel(launched, found.schedule)  # makes the operators
        trip, taken_s = _quickest(partial(passage.travel, launched, found.schedule))
        error = relative_error(resampled(trip.field, self._samples), self.truth)
        widest = trip.schedule[-1].samples
        weighed = 0.0
        for index, leg in enumerate(trip.schedule):
            steps = sum(piece.steps for piece in passage.pieces(leg)[index])
            size = leg.samples * math.log(leg.samples) / (widest * math.log(widest))
            weighed += steps * passage.scheme.transforms_per_step * size
        return Rung(trip.transforms, taken_s, error), weighed

    def plain_rungs(self, plain: ModuleType, steps: Sequence[int]) -> list[Rung]:
        """Runs of the plain script."""
        fibre = plain_fibre(plain, self._passage.experiment)
        step_ps = self._passage.grid(self._samples).time_step_ps
        made = []
        for count in steps:
            field, taken_s = timed(plain.propagate, self._fields[0], step_ps, fibre, count)
            made.append(Rung(2 * count + 2, taken_s, relative_error(field[None], self.truth)))
        return made


@dataclass(frozen=True)
class Case:
    """Everything tried at one power."""

    second: list[Rung]
    fourth: list[Rung]
    second_single: list[Rung]
    plain: list[Rung]
    study: Rung
    study_weighed: float

    def curves(self) -> list[tuple[str, list[Rung]]]:
        """What to draw, by name."""
        named = [
            ("second order, double", self.second),
            ("fourth order, double", self.fourth),
            ("second order, single", self.second_single),
            ("plain script, double", self.plain),
            ("a study's own steps and grids, second order, single", [self.study]),
        ]
        return [(name, rungs) for name, rungs in named if rungs]

    def crossing(self) -> float:
        """The largest error below which the fourth order is the quicker, as far as tried."""
        errors = np.geomspace(1e-1, 1e-7, 61)
        quicker = [
            work_at(e, self.fourth, of_time) < work_at(e, self.second, of_time) for e in errors
        ]
        slower = [place for place, yes in enumerate(quicker) if not yes]
        return float(errors[min(slower[-1] + 1 if slower else 0, len(errors) - 1)])


def case(plain: ModuleType | None, power_mw: float, samples: int, first: int) -> Case:
    """Try everything at one power; ``first`` is the fewest steps of second order."""
    ladder = Ladder(power_mw, samples, FOURTH_ORDER, 2048)
    study, weighed = ladder.study_rung()
    return Case(
        second=ladder.rungs(SECOND_ORDER, "double", [first * 2**n for n in range(9)]),
        fourth=ladder.rungs(FOURTH_ORDER, "double", [max(2, first // 4) * 2**n for n in range(7)]),
        second_single=ladder.rungs(SECOND_ORDER, "single", [first * 2**n for n in range(7)]),
        plain=ladder.plain_rungs(plain, [first * 2**n for n in range(6)]) if plain else [],
        study=study,
        study_weighed=weighed,
    )
