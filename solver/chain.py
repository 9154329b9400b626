"""One point of a study: what has been taken in of it, and whether that is enough."""

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from solver.budget import GridUse
from solver.experiment import Study
from solver.findings import Invariants, LinearRegime, Picture, Scales
from solver.grid import Real
from solver.result import PointResult
from solver.statistics import Blocks, Estimators, Layout, Means, last_central
from solver.task import (
    APART,
    CHUNK,
    PILOTED,
    Findings,
    Leg,
    RoundOutcome,
    chunk_size,
    chunks,
)


@dataclass(frozen=True)
class _Part:
    """A chunk of realizations, or the outcome that ended the light."""

    blocks: Real
    sums: Real
    transforms: int
    ended: RoundOutcome | None = None


class Chain:
    """The rounds of one point: what is under way, what has been taken in, whether it is enough."""

    def __init__(self, study: Study, variant: int, point: int) -> None:
        self.variant, self.point = variant, point
        self.experiment = study.experiment_at(variant, point)
        self.ensemble = self.experiment.ensemble
        self.layout = Layout.of(self.ensemble, self.experiment.receiver)
        self.rank = 0
        self.blocks = Blocks(self.layout.block_features)
        self.means = Means(self.layout.mean_features)
        self.findings: Findings | None = None
        self.transforms = 0
        self.outcome, self.advice = "completed", ""
        self.final = self.target_met = False
        self.alone = False
        self._round_end = 0
        self._early: dict[int, _Part] = {}  # what lies beyond the round, or overtook its start
        self._result: PointResult | None = None
        self._error: float | None = None

    @property
    def realizations(self) -> int:
        """Realizations taken in."""
        return self.blocks.realizations

    def aim(self) -> int:
        """Realizations to have at the end of the round, the next one where it is over."""
        if self.realizations >= self._round_end:
            # The first task finds the schedule for all the others, so it goes alone.
            first = max(chunk_size(self.ensemble.samples), PILOTED)
            wanted = self._wanted() if self.findings else first
            self._round_end = min(wanted, self.ensemble.max_realizations)
        return self._round_end

    def _wanted(self) -> int:
        """Realizations to have after the next round, from the standard error of this one.

        Whole chunks, so that all points of the same light cut theirs at the same places.
        """
        n, fewest = self.realizations, self.ensemble.min_realizations
        if n < fewest:
            return fewest
        ratio = self.standard_error() / self.ensemble.standard_error_target
        needed = CHUNK * math.ceil(min(n * ratio**2, 1e9) / CHUNK)
        following = CHUNK * (n // CHUNK + 1)
        return max(min(needed, CHUNK * (4 * n // CHUNK)), following)

    def standard_error(self) -> float:
        """Standard error of C12(0) at the end of the line, infinite before there is one."""
        if self.realizations < 2 or not self.findings:
            return math.inf
        if self._error is None:
            launched = self.findings.linear.launched
            error = float(last_central(self.layout, self.blocks, launched).standard_error[0])
            self._error = error if math.isfinite(error) else math.inf
        return self._error

    def absorb(self, first: int, outcome: RoundOutcome) -> None:
        """Take in the outcome of a task that began at this realization.

        Chunks are added in the order of their realizations; one that comes early waits. What to
        do next is decided from whole rounds, wherever the tasks were cut.
        """
        if self.final:
            return
        if outcome.outcome == APART:
            self.alone = True
            return
        if outcome.outcome != "completed":
            self._early[first] = _Part(np.zeros(0), np.zeros(0), 0, ended=outcome)
        self.findings = outcome.findings or self.findings
        done = 0
        rows = chunks(self.ensemble.samples, first, len(outcome.blocks))
        for chunk, sums, spent in zip(rows, outcome.sums, outcome.transforms, strict=True):
            blocks = outcome.blocks[done : done + len(chunk)]
            self._early[chunk.start] = _Part(blocks, sums, spent)
            done += len(chunk)
        while not self.final and self.realizations < self.aim():
            part = self._early.pop(self.realizations, None)
            if part is None:
                return
            self._add(part)

    def _add(self, part: _Part) -> None:
        self._result = self._error = None
        if part.ended is not None:
            self._give_up(part.ended)
            return
        self.blocks.add(part.blocks)
        self.means.add(len(part.blocks), part.sums)
        self.transforms += part.transforms
        if self.realizations >= self._round_end:
            self._decide()

    def _give_up(self, ended: RoundOutcome) -> None:
        self.blocks = Blocks(self.layout.block_features)
        self.means = Means(self.layout.mean_features)
        self.findings = None
        self._early.clear()
        self.outcome, self.advice, self.final = ended.outcome, ended.advice, True

    def _decide(self) -> None:
        n = self.realizations
        enough = n >= self.ensemble.min_realizations
        self.target_met = enough and self.standard_error() <= self.ensemble.standard_error_target
        self.final = self.target_met or n >= self.ensemble.max_realizations
        if self.final:
            self._early.clear()

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
                use=self.findings.use if self.findings else None,
                picture=self.findings.picture if self.findings else None,
                invariants=self.findings.invariants if self.findings else None,
                scales=self.findings.scales if self.findings else None,
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
                **{f"kept/{name}": np.array(x) for name, x in vars(found.invariants).items()},
                **{f"scales/{name}": np.array(x) for name, x in vars(found.scales).items()},
                **{f"use/{name}": np.array(x) for name, x in vars(found.use).items()},
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
            Invariants(**{name: x.item() for name, x in under("kept/").items()}),
            Scales(**{name: x.item() for name, x in under("scales/").items()}),
            GridUse(**{name: value.item() for name, value in under("use/").items()}),
        )
        if self.realizations >= self._round_end:
            self._decide()
