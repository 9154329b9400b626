"""From a study to tasks, and from their outcomes, in any order, to curves.

:class:`StudyState` is bookkeeping only: it never computes a field. Each point of each curve is
a chain of rounds; a round is taken in as a whole, in the order of its realizations, before
anything is decided from it, so the result does not depend on how many workers there are or
which of them is fast. Points that differ behind the line only are of one family: the same
fields tell of all of them.
"""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from solver.chain import Chain
from solver.experiment import Experiment, Study
from solver.findings import Picture
from solver.pairing import Difference, difference
from solver.result import PointResult, StudyResult
from solver.task import (
    PILOTED,
    Beside,
    MapPart,
    MapTask,
    RoundOutcome,
    RoundTask,
    Task,
    chunk_size,
)

TASK_S = 0.2
"""How long a task should take: much more than handing it out does, and not so long that cores
wait for the last one."""
MOST_IN_TASK = 256
"""Realizations in one task at most, so that what it hands back stays small."""
MOST_BESIDE = 16
"""Points of one light in one task at most, so that it holds no more than it can hand back soon."""


def execute(task: Task) -> RoundOutcome | MapPart:
    """Carry out a task. Runs on a worker; loads the compiled solver there."""
    from solver import ensemble  # here, so that the server can import this module without it

    if isinstance(task, MapTask):
        return ensemble.run_map(task)
    assert isinstance(task, RoundTask)
    return ensemble.run_round(task)


def prepare(study: Study) -> None:
    """Load and compile what a study's tasks need, on the worker this runs on."""
    first = study.experiment_at(0, 0)
    execute(MapTask("warm-map", 0, 0, 0, first, part=0))
    execute(RoundTask("warm-round", 0, 0, 0, first, first=0, count=PILOTED, schedule=None))


def plan_transforms(study: Study, place: int) -> bool:
    """Plan one of the usual shapes of transforms of a study, on the machine this runs on.

    Whether there are more to plan, at the next place.
    """
    from solver import transforms  # here, so that the server can import this module without it

    ensemble = study.experiment.ensemble
    shapes = transforms.usual_shapes(
        max(ensemble.samples // 4, 2), 2 * ensemble.samples, ensemble.precision, PILOTED
    )
    transforms.plan_ahead(shapes[place : place + 1])
    return place + 1 < len(shapes)


@dataclass(frozen=True)
class Progress:
    """How far a study has got; ``fraction`` is an estimate in [0, 1]."""

    fraction: float
    realizations: int
    points_done: int
    points_total: int


@dataclass(frozen=True)
class MapRows:
    """Rows that a part added to the live map."""

    variant: int
    point: int
    length_km: float
    first_row: int
    picture: Picture


def _outside_in(count: int) -> list[int]:
    """0 to count − 1 in an order that shows the whole curve early: ends, middle, quarters…"""
    order = [0, count - 1] if count > 1 else [0]
    gaps = [(0, count - 1)]
    while gaps:
        low, high = gaps.pop(0)
        if high - low > 1:
            middle = (low + high) // 2
            order.append(middle)
            gaps += [(low, middle), (middle, high)]
    return order


class Family:
    """Chains whose light is the same up to the end of the line.

    They go through their rounds together, each until it has enough; what one of them finds does
    not depend on the others.
    """

    def __init__(self, chains: Sequence[Chain]) -> None:
        self.chains = {(chain.variant, chain.point): chain for chain in chains}
        self._under_way: set[str] = set()
        self._samples = chains[0].ensemble.samples
        self._in_task = chunk_size(self._samples)

    def next_round(self) -> list[RoundTask]:
        """Tasks of the next rounds, or of what is left of them; none where all is final."""
        groups: dict[object, list[Chain]] = {}
        for chain in self.chains.values():
            if not chain.final:
                schedule = chain.findings.schedule if chain.findings else None
                apart = (chain.variant, chain.point) if chain.alone else None
                groups.setdefault((schedule, apart), []).append(chain)
        tasks = [task for group in groups.values() for task in self._tasks(group)]
        self._under_way = {task.key for task in tasks}
        return tasks

    def _tasks(self, group: Sequence[Chain]) -> Iterator[RoundTask]:
        """From where the first of a group is to where the last one wants to be."""
        lead = group[0]
        first = min(chain.realizations for chain in group)
        last = max(chain.aim() for chain in group)
        starts = [first]
        if lead.findings:
            starts += range(first + self._in_task - first % self._in_task, last, self._in_task)
        for start, stop in pairwise([*starts, last]):
            yield RoundTask(
                key=f"round-{lead.variant}-{lead.point}-{start}",
                variant=lead.variant,
                point=lead.point,
                priority=-lead.rank,
                experiment=lead.experiment,
                first=start,
                count=stop - start,
                schedule=lead.findings.schedule if lead.findings else None,
                beside=tuple(
                    Beside(
                        chain.variant,
                        chain.point,
                        chain.experiment.preamplifier,
                        chain.experiment.receiver,
                    )
                    for chain in group[1:]
                ),
            )

    def absorb(self, task: RoundTask, outcome: RoundOutcome) -> list[RoundTask]:
        """Take an outcome in; when no more are under way, the tasks of the next rounds."""
        if task.key not in self._under_way:
            return []
        self._under_way.remove(task.key)
        for place, found in zip(task.places, (outcome, *outcome.beside), strict=True):
            self.chains[place].absorb(task.first, found)
        self._measure(task, outcome)
        return [] if self._under_way else self.next_round()

    def _measure(self, task: RoundTask, outcome: RoundOutcome) -> None:
        """Size the tasks to come by the time this one took; which decides no bit of the result."""
        if outcome.seconds == 0.0:
            return
        chunk = chunk_size(self._samples)
        fitting = TASK_S / max(outcome.seconds / task.count, 1e-9) / chunk
        most = MOST_IN_TASK // len(task.places) // chunk
        self._in_task = chunk * max(1, min(int(fitting), most))


def _families(chains: Sequence[Chain]) -> Iterator[Family]:
    """Chains sorted by their light, few enough of one light to be handled at once."""
    alike: dict[Experiment, list[Chain]] = {}
    for chain in chains:
        alike.setdefault(chain.experiment.light, []).append(chain)
    for group in alike.values():
        for start in range(0, len(group), MOST_BESIDE):
            yield Family(group[start : start + MOST_BESIDE])


class StudyState:
    """All chains of a study, and the map that is watched live. Not thread-safe."""

    def __init__(self, study: Study) -> None:
        self.study = study
        self.live_map = (0, study.sweep.points - 1)
        self._furthest = 0.0
        self._differences: dict[tuple[int, int], tuple[tuple[int, int], Difference | None]] = {}
        variants = range(len(study.curves))
        self.chains = {
            (variant, point): Chain(study, variant, point)
            for variant in variants
            for point in range(study.sweep.points)
        }
        for place, point in enumerate(_outside_in(study.sweep.points)):
            for variant in variants:
                self.chains[variant, point].rank = place * len(variants) + variant
        ranked = sorted(self.chains.values(), key=lambda chain: chain.rank)
        self._families = list(_families(ranked))
        self._family = {place: family for family in self._families for place in family.chains}

    def ready(self) -> list[Task]:
        """The tasks to begin with; call once, after any :meth:`restore`."""
        tasks: list[Task] = [task for family in self._families for task in family.next_round()]
        variant, point = self.live_map
        chain = self.chains[self.live_map]
        if not chain.findings and not chain.final:
            tasks.append(MapTask("map-0", variant, point, 1, chain.experiment, part=0))
        return sorted(tasks, key=lambda task: -task.priority)

    def absorb(self, task: Task, outcome: RoundOutcome | MapPart) -> list[Task]:
        """Take in what a task came to; returns the tasks that have become ready."""
        if isinstance(task, MapTask):
            assert isinstance(outcome, MapPart)
            if outcome.field is None:
                return []
            part = task.part + 1
            key = f"map-{part}"
            return [replace(task, key=key, part=part, field=outcome.field, leg=outcome.leg)]
        assert isinstance(task, RoundTask)
        assert isinstance(outcome, RoundOutcome)
        return list(self._family[task.variant, task.point].absorb(task, outcome))

    def live_map_rows(self, task: Task, outcome: RoundOutcome | MapPart) -> MapRows | None:
        """The rows that a part of the live map added; None for any other task."""
        if not isinstance(outcome, MapPart) or outcome.picture is None:
            return None
        length_km = task.experiment.length_km
        return MapRows(task.variant, task.point, length_km, outcome.first_row, outcome.picture)

    @property
    def finished(self) -> bool:
        """Whether every point is final."""
        return all(chain.final for chain in self.chains.values())

    def progress(self) -> Progress:
        """How far the study has got."""
        chains = self.chains.values()
        # A point that starts again on a finer grid must not send the bar backwards.
        now = sum(chain.fraction() for chain in chains) / len(chains)
        self._furthest = max(self._furthest, now)
        return Progress(
            fraction=self._furthest,
            realizations=sum(chain.realizations for chain in chains),
            points_done=sum(chain.final for chain in chains),
            points_total=len(chains),
        )

    def point(self, variant: int, point: int) -> PointResult | None:
        """What has been found of a point so far; None before anything has."""
        chain = self.chains[variant, point]
        first = self.chains[self.study.first_of(variant), point]
        found = chain.result()
        if found is None or chain is first or not (chain.findings and first.findings):
            return found
        counts = chain.realizations, first.realizations
        known = self._differences.get((variant, point))
        if known is None or known[0] != counts:
            launched = chain.findings.linear.launched, first.findings.linear.launched
            paired = difference(chain.layout, chain.blocks, first.blocks, launched)
            known = self._differences[variant, point] = counts, paired
        return replace(found, difference=known[1])

    def touched(self, task: Task) -> list[tuple[int, int]]:
        """The (variant, point) whose results an outcome of the task may have changed."""
        step, count = self.study.seconds, len(self.study.curves)
        return [
            (other, point)
            for variant, point in places(task)
            for other in (range(variant, count, step) if variant < step else [variant])
        ]

    def checkpoint(self, variant: int, point: int) -> dict[str, np.ndarray] | None:
        """A point's state so far, as arrays; None before anything was taken in."""
        return self.chains[variant, point].checkpoint()

    def restore(self, variant: int, point: int, arrays: Mapping[str, np.ndarray]) -> None:
        """Go on from a :meth:`checkpoint` of the same study; call before :meth:`ready`."""
        self.chains[variant, point].restore(arrays)

    def result(self) -> StudyResult:
        """Everything found so far."""
        return StudyResult(
            self.study,
            [
                [self.point(variant, point) for point in range(self.study.sweep.points)]
                for variant in range(len(self.study.curves))
            ],
        )


def places(task: Task) -> list[tuple[int, int]]:
    """The (variant, point) that a task computes."""
    return task.places if isinstance(task, RoundTask) else [(task.variant, task.point)]
