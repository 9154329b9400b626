"""From a study to tasks, and from their outcomes, in any order, to curves.

:class:`StudyState` is bookkeeping only: it never computes a field. Each point of each curve is
a chain of rounds; a round is taken in as a whole, in the order of its realizations, before
anything is decided from it, so the result does not depend on how many workers there are or
which of them is fast.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from solver.experiment import Study
from solver.pairing import Difference, difference
from solver.result import LinearRegime, Picture, PointResult, StudyResult
from solver.statistics import Blocks, Estimators, Layout, Means, last_central
from solver.task import (
    CHUNK,
    PILOTED,
    Findings,
    Leg,
    MapPart,
    MapTask,
    RoundOutcome,
    RoundTask,
    Task,
    chunk_size,
    chunks,
)

TASK_S = 0.2
"""How long a task should take: much more than handing it out does, and not so long that cores
wait for the last one."""
MOST_IN_TASK = 256
"""Realizations in one task at most, so that what it hands back stays small."""


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


class Chain:
    """The rounds of one point: what is under way, what has been taken in, whether it is enough."""

    def __init__(self, study: Study, variant: int, point: int) -> None:
        self.variant, self.point = variant, point
        self.experiment = study.experiment_at(variant, point)
        self.ensemble = self.experiment.ensemble
        self.layout = Layout.of(self.ensemble)
        self.rank = 0
        self.blocks = Blocks(self.layout.block_features)
        self.means = Means(self.layout.mean_features)
        self.findings: Findings | None = None
        self.transforms = 0
        self.outcome, self.advice = "completed", ""
        self.final = self.target_met = False
        self._round_end = 0
        self._in_task = chunk_size(self.ensemble.samples)
        self._early: dict[int, RoundOutcome] = {}  # what overtook an earlier part of its round
        self._result: PointResult | None = None
        self._error: float | None = None

    @property
    def realizations(self) -> int:
        """Realizations taken in."""
        return self.blocks.realizations

    def next_round(self) -> list[RoundTask]:
        """Tasks of the next round, or of what is left of one; none when the point is final."""
        if self.final:
            return []
        first, size = self.realizations, self._in_task
        if first >= self._round_end:
            # The first task finds the schedule for all the others, so it goes alone.
            wanted = self._wanted() if self.findings else max(size, PILOTED)
            self._round_end = min(wanted, self.ensemble.max_realizations)
        last = self._round_end
        starts = [first]
        if self.findings:
            starts += range(first + size - first % size, last, size)
        return [
            RoundTask(
                key=f"round-{self.variant}-{self.point}-{start}",
                variant=self.variant,
                point=self.point,
                priority=-self.rank,
                experiment=self.experiment,
                first=start,
                count=stop - start,
                schedule=self.findings.schedule if self.findings else None,
            )
            for start, stop in pairwise([*starts, last])
        ]

    def _wanted(self) -> int:
        """Realizations to have after the next round, from the standard error of this one."""
        n, fewest = self.realizations, self.ensemble.min_realizations
        if n < fewest:
            return fewest
        ratio = self.standard_error() / self.ensemble.standard_error_target
        needed = CHUNK * math.ceil(min(n * ratio**2, 1e9) / CHUNK)
        return min(max(needed, n + CHUNK), 4 * n)

    def standard_error(self) -> float:
        """Standard error of C12(0) at the end of the line, infinite before there is one."""
        if self.realizations < 2 or not self.findings:
            return math.inf
        if self._error is None:
            launched = self.findings.linear.launched
            error = float(last_central(self.layout, self.blocks, launched).standard_error[0])
            self._error = error if math.isfinite(error) else math.inf
        return self._error

    def absorb(self, task: RoundTask, outcome: RoundOutcome) -> list[RoundTask]:
        """Take an outcome in; when its round is whole, the tasks of the next one.

        Parts are added in the order of their realizations; one that comes early waits.
        """
        if self.final or task.first < self.realizations:
            return []
        self._early[task.first] = outcome
        while (part := self._early.pop(self.realizations, None)) is not None:
            self._result = self._error = None
            if part.outcome != "completed":
                self._give_up(part)
                return []
            self.blocks.add(part.blocks)
            for chunk, sums in zip(
                chunks(self.ensemble.samples, self.means.count, len(part.blocks)),
                part.sums,
                strict=True,
            ):
                self.means.add(len(chunk), sums)
            self.transforms += part.transforms
            self.findings = part.findings or self.findings
            self._measure(part)
        if self.realizations < self._round_end:
            return []
        self._decide()
        return self.next_round()

    def _give_up(self, part: RoundOutcome) -> None:
        self.blocks = Blocks(self.layout.block_features)
        self.means = Means(self.layout.mean_features)
        self.findings = None
        self.outcome, self.advice, self.final = part.outcome, part.advice, True

    def _measure(self, part: RoundOutcome) -> None:
        """Size the tasks to come by the time this one took; which decides no bit of the result."""
        chunk = chunk_size(self.ensemble.samples)
        fitting = TASK_S / max(part.seconds / len(part.blocks), 1e-9) / chunk
        self._in_task = chunk * max(1, min(int(fitting), MOST_IN_TASK // chunk))

    def _decide(self) -> None:
        n = self.realizations
        enough = n >= self.ensemble.min_realizations
        self.target_met = enough and self.standard_error() <= self.ensemble.standard_error_target
        self.final = self.target_met or n >= self.ensemble.max_realizations

    def fraction(self) -> float:
        """Share of the realizations it will take, as far as can be told."""
        if self.final:
            return 1.0
        n = self.realizations
        if n == 0:
            return 0.0
        likely = n * (self.standard_error() / self.ensemble.standard_error_target) ** 2
        ensemble = self.ensemble
        return n / min(max(likely, n + 1, ensemble.min_realizations), ensemble.max_realizations + 1)

    def result(self) -> PointResult | None:
        """What has been found so far; None before anything has."""
        if self._result is None and (self.final or self.findings):
            self._result = PointResult(
                variant=self.variant,
                point=self.point,
                realizations=self.realizations,
                target_met=self.target_met,
                final=self.final,
                outcome=self.outcome,
                advice=self.advice,
                discretization_error=self.findings.discretization_error if self.findings else 0.0,
                steps=self.findings.steps if self.findings else 0,
                transforms=self.transforms,
                samples=self.findings.schedule[-1].samples if self.findings else 0,
                length_km=self.experiment.length_km,
                estimates=(
                    Estimators(self.layout, self.blocks, self.means, self.findings.linear.launched)
                    if self.findings
                    else {}
                ),
                linear=self.findings.linear if self.findings else None,
                picture=self.findings.picture if self.findings else None,
            )
        return self._result

    def checkpoint(self) -> dict[str, np.ndarray] | None:
        """State of what has been taken in, as arrays; None before anything has."""
        if self.findings is None and not self.final:
            return None
        arrays = {
            "round_end": np.array(self._round_end),
            "transforms": np.array(self.transforms),
            "outcome": np.array(self.outcome),
            "advice": np.array(self.advice),
            **{f"blocks/{name}": value for name, value in self.blocks.arrays().items()},
            **{f"means/{name}": value for name, value in self.means.arrays().items()},
        }
        if self.findings is not None:
            found = self.findings
            arrays |= {
                "steps": np.array(found.steps),
                "schedule": np.array([(leg.samples, leg.steps) for leg in found.schedule]),
                "discretization_error": np.array(found.discretization_error),
                "map": found.picture.data,
                "intensity_scale_w": np.array(found.picture.intensity_scale_w),
                **{f"linear/{name}": np.array(x) for name, x in vars(found.linear).items()},
            }
        return arrays

    def restore(self, arrays: Mapping[str, np.ndarray]) -> None:
        """Go on from a :meth:`checkpoint`."""

        def under(prefix: str) -> dict[str, np.ndarray]:
            return {k.removeprefix(prefix): v for k, v in arrays.items() if k.startswith(prefix)}

        self._round_end = int(arrays["round_end"])
        self.transforms = int(arrays["transforms"])
        self.outcome, self.advice = str(arrays["outcome"]), str(arrays["advice"])
        self.blocks = Blocks.from_arrays(under("blocks/"))
        self.means = Means.from_arrays(under("means/"))
        if self.outcome != "completed":
            self.final = True
            return
        linear = under("linear/")
        self.findings = Findings(
            tuple(Leg(int(samples), int(steps)) for samples, steps in arrays["schedule"]),
            int(arrays["steps"]),
            float(arrays["discretization_error"]),
            Picture(np.array(arrays["map"]), float(arrays["intensity_scale_w"])),
            LinearRegime(
                linear["auto1"],
                linear["auto2"],
                linear["sum"],
                linear["cross"],
                float(linear["moment_cross"]),
                float(linear["launched"]),
            ),
        )
        if self.realizations >= self._round_end:
            self._decide()


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


class StudyState:
    """All chains of a study, and the map that is watched live. Not thread-safe."""

    def __init__(self, study: Study) -> None:
        self.study = study
        self.live_map = (0, study.sweep.points - 1)
        self._furthest = 0.0
        self._differences: dict[tuple[int, int], tuple[tuple[int, int], Difference | None]] = {}
        variants = range(len(study.variants))
        self.chains = {
            (variant, point): Chain(study, variant, point)
            for variant in variants
            for point in range(study.sweep.points)
        }
        for place, point in enumerate(_outside_in(study.sweep.points)):
            for variant in variants:
                self.chains[variant, point].rank = place * len(variants) + variant

    def ready(self) -> list[Task]:
        """The tasks to begin with; call once, after any :meth:`restore`."""
        tasks: list[Task] = [task for chain in self.chains.values() for task in chain.next_round()]
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
        return list(self.chains[task.variant, task.point].absorb(task, outcome))

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
        chain, first = self.chains[variant, point], self.chains[0, point]
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
        others = range(len(self.study.variants)) if task.variant == 0 else [task.variant]
        return [(variant, task.point) for variant in others]

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
                for variant in range(len(self.study.variants))
            ],
        )
