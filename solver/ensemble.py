"""What one worker computes: a round of realizations, or a part of the map that is watched live.

Both are pure functions of what the task holds, so any of them may be run again, anywhere.
"""

import math
import time
from dataclasses import dataclass, replace

import numpy as np

from solver.experiment import Experiment
from solver.features import features, moments
from solver.grid import Field, Real
from solver.kernels import column_powers, intensity_moments, map_levels
from solver.passage import Passage, Trip
from solver.propagation import STEP_LIMIT, relative_error
from solver.receiver import detect
from solver.result import MAP_COLUMNS, MAP_ROWS, LinearRegime, Picture
from solver.statistics import Blocks, Estimate, Layout, central, sums_and_squares
from solver.task import (
    PILOTED,
    Findings,
    Leg,
    MapPart,
    MapTask,
    RoundOutcome,
    RoundTask,
    Schedule,
    chunks,
    map_parts,
)
from solver.theory import launched_central, linear_correlations
from solver.track import COMPLETED, Outcome
from solver.transforms import batches, resampled

PILOT_GUARD = 1 / 3
"""The pilot stays this much clearer of a band ended by its steps than the ensemble must."""
MAP_LEGS = 16
"""Parts of the line after which the light of a map is looked at; each has some of its rows."""
COARSER = 1.6
"""Ratio of the numbers of steps of two runs that are compared."""
STALLED = 0.9
"""Ratio of two errors above which the shorter steps of the second were of no use."""
BRIGHTEST = 3.0
"""Top of a map's power scale, in units of the total launch power."""


@dataclass(frozen=True)
class Seen:
    """A batch at the end of the line: its trip, and moments, shape (realizations, distances, 5)."""

    launched: Field
    trip: Trip
    moments: Real


class Bench:
    """An experiment's passage with its receiver."""

    def __init__(self, experiment: Experiment) -> None:
        self.experiment = experiment
        self.layout = Layout.of(experiment.ensemble)
        self.passage = Passage(experiment, experiment.ensemble.distances)

    def detected(self, field: Field) -> Real:
        """Intensities after the receiver, W, on the time step asked for or a finer one."""
        asked = resampled(field, max(field.shape[2], self.layout.grid.samples))
        return detect(asked, self.experiment.receiver, self.passage.grid(asked.shape[2]))

    def moments(self, field: Field) -> Real:
        """Moments of the detected intensities, shape (realizations, 5)."""
        receiver = self.experiment.receiver
        if receiver.filter != "none":
            return moments(self.detected(field))
        # Time means of unfiltered intensities are unbiased on any time step that holds the field.
        if receiver.extinction_db is None:
            return np.asarray(intensity_moments(field))
        return moments(detect(field, receiver, self.passage.grid(field.shape[2])))

    def follow(self, launched: Field, schedule: Schedule, guard: float = 1.0) -> Seen:
        """Take a batch down the line."""
        recorded = np.empty((len(launched), self.layout.distances, 5))
        recorded[:, 0] = self.moments(launched)

        def observe(leg: int, field: Field) -> None:
            recorded[:, leg + 1] = self.moments(field)

        trip = self.passage.travel(launched, schedule, guard=guard, observe=observe)
        return Seen(launched, trip, recorded)

    def features(self, seen: Seen) -> tuple[Real, Real]:
        """Feature vectors of a batch for the accumulators."""
        arrived = seen.trip.field
        return features(self.layout, seen.launched, arrived, self.detected(arrived), seen.moments)


@dataclass(frozen=True)
class Pilot:
    """A schedule for the whole ensemble, found on a few realizations, and what it costs C12(0).

    seen: these realizations, on that schedule or one of shorter steps; bias: distance of C12(0)
    at the end from its limit of small steps, estimated on them.
    """

    schedule: Schedule
    bias: float
    transforms: int
    seen: Seen
    outcome: Outcome = COMPLETED


TOO_FINE = Outcome(
    "tolerance_not_met",
    "steps and samples needed are too many: loosen field_tolerance or standard_error_target, or "
    "lower the power or the length",
)


def pilot(bench: Bench, launched: Field) -> Pilot:
    """Find steps and grid for a whole ensemble on a few of its realizations, which are all alike.

    The rule: the bias of C12(0) at the end of the line, plus two of its own standard errors,
    stays under BIAS_SHARE of the standard error that is aimed at, and the field's error under the
    field tolerance. Both are judged from a second run with fewer steps (or more, where there is
    but one on each leg), by Richardson's argument, realization by realization.
    """
    passage = bench.passage
    order = passage.scheme.order
    schedule, spent = passage.expected(), 0
    other: Trip | None = None
    previous_excess = math.inf
    while True:
        seen = bench.follow(launched, schedule, PILOT_GUARD)
        trip = seen.trip
        spent += trip.transforms
        schedule = trip.schedule
        if trip.outcome.kind != "completed" or not passage.weights.any():
            return Pilot(schedule, 0.0, spent, seen, trip.outcome)
        most = max(leg.steps for leg in schedule)
        if any(leg.steps < most for leg in schedule):
            # Steps that grew on the way grow from the start: see Track.pieces.
            schedule = tuple(replace(leg, steps=most) for leg in schedule)
            continue
        if other is None or trip.steps < COARSER * other.steps:
            other = _compared(passage, trip, launched)
            spent += other.transforms
            if other.outcome.kind != "completed":
                return Pilot(schedule, 0.0, spent, seen, other.outcome)
        # An error of c/N^p in one and c/M^p in the other: their difference tells c.
        scale = abs((trip.steps / other.steps) ** order - 1.0)
        field = resampled(other.field, trip.field.shape[2])
        error = relative_error(field, trip.field) / scale
        shift = _shift(seen.moments[:, -1], bench.moments(field))
        bias, unsure = abs(float(shift.value[0])) / scale, float(shift.standard_error[0]) / scale
        unsure = unsure if math.isfinite(unsure) else 0.0
        excess = max(error / passage.field_tolerance, (bias + 2.0 * unsure) / passage.bias_allowed)
        if excess <= 1.0:
            # As few as have just been tried may do.
            fewer = _scaled(schedule, max((1.2 * excess) ** (1 / order), 1 / COARSER))
            saved = passage.steps(fewer) / trip.steps
            if saved > 0.95 / COARSER and excess <= saved**order:
                return Pilot(fewer, bias / saved**order, spent, seen)
            return Pilot(schedule, bias, spent, seen)
        if excess > STALLED * previous_excess:
            # Shorter steps do not help: what is left is cut off by the band.
            widest = schedule[-1].samples
            if schedule[0].samples == widest:
                widest *= 2
            if widest > passage.widest:
                return Pilot(schedule, np.nan, spent, seen, TOO_FINE)
            schedule = tuple(replace(leg, samples=widest) for leg in schedule)
            other, previous_excess = None, math.inf
            continue
        previous_excess = excess
        # An excess found with steps this long says little of how many it takes.
        growth = min(max((1.2 * excess) ** (1 / order), 1.2), COARSER)
        if trip.steps * growth > STEP_LIMIT:
            return Pilot(schedule, np.nan, spent, seen, TOO_FINE)
        # A leg has one step at least: fewer steps than legs grow from there.
        growth *= max(1.0, trip.steps / max(leg.steps for leg in schedule))
        schedule, other = _scaled(schedule, growth), trip


def _scaled(schedule: Schedule, factor: float) -> Schedule:
    return tuple(replace(leg, steps=math.ceil(leg.steps * factor)) for leg in schedule)


def _compared(passage: Passage, trip: Trip, launched: Field) -> Trip:
    """The same fields in fewer steps than a trip took, or in more where that cannot be."""
    samples = trip.field.shape[2]
    coarse = passage.watched(1)
    for steps in (trip.steps / COARSER, COARSER * trip.steps):
        leg = Leg(samples, round(steps))
        count = sum(piece.steps for piece in coarse.pieces(leg)[0])
        if abs(math.log(count / trip.steps)) > 0.7 * math.log(COARSER):
            break
    return coarse.travel(resampled(launched, samples), (leg,), checked=False)


def _shift(moments: Real, others: Real) -> Estimate:
    """C12(0) of the same realizations computed in two ways: the difference, shape (1,)."""
    paired = Blocks(10)
    paired.add(np.concatenate([moments, others], axis=1))
    return paired.estimate(lambda m: (central(m[..., :5]) - central(m[..., 5:]))[..., None])


def run_round(task: RoundTask) -> RoundOutcome:
    """Realizations ``task.first`` and following; the first round also finds the schedule."""
    start_s = time.perf_counter()
    bench = Bench(task.experiment)
    if bench.passage.expected_steps > STEP_LIMIT:
        return RoundOutcome(TOO_FINE.kind, TOO_FINE.advice)
    schedule, spent, findings = task.schedule, 0, None
    blocks: list[Real] = []
    sums: list[Real] = []
    for chunk in chunks(task.experiment.ensemble.samples, task.first, task.count):
        launched = bench.passage.fields(chunk)
        found = []
        rows = range(len(chunk))
        if schedule is None:
            rows = rows[PILOTED:]
            piloted = pilot(bench, launched[:PILOTED])
            outcome = piloted.outcome
            if outcome.kind == "completed":
                schedule, spent = piloted.schedule, piloted.transforms
                picture, outcome = _picture(bench.passage, schedule)
            if outcome.kind != "completed" or schedule is None:
                return RoundOutcome(outcome.kind, outcome.advice)
            steps = bench.passage.steps(schedule)
            findings = Findings(schedule, steps, piloted.bias, picture, _linear_regime(bench))
            found.append(bench.features(piloted.seen))
        for batch in batches(rows, max(leg.samples for leg in schedule)):
            seen = bench.follow(launched[batch.start : batch.stop], schedule)
            spent += seen.trip.transforms
            if seen.trip.outcome.kind != "completed":
                return RoundOutcome(seen.trip.outcome.kind, seen.trip.outcome.advice)
            found.append(bench.features(seen))
        for_blocks, for_means = zip(*found, strict=True)
        blocks += for_blocks
        sums.append(sums_and_squares(np.concatenate(for_means)))
    return RoundOutcome(
        "completed",
        blocks=np.concatenate(blocks),
        sums=np.stack(sums),
        transforms=spent,
        seconds=time.perf_counter() - start_s,
        findings=findings,
    )


def _linear_regime(bench: Bench) -> LinearRegime:
    layout = bench.layout
    found = linear_correlations(bench.experiment, layout.grid)
    lags = np.arange(-layout.lags, layout.lags + 1) * layout.lag_stride
    launched = launched_central(bench.experiment, bench.passage.grid(bench.passage.start_samples))
    return LinearRegime(
        found.auto1[lags],
        found.auto2[lags],
        found.sum[lags],
        found.cross[lags],
        found.moment_cross,
        launched,
    )


class _Map:
    """A passage of one realization, watched at the rows of a map."""

    def __init__(self, passage: Passage) -> None:
        experiment = passage.experiment
        self.passage = passage.watched(MAP_LEGS, MAP_ROWS // MAP_LEGS)
        self._columns = min(MAP_COLUMNS, experiment.ensemble.samples)
        self._scale_w = BRIGHTEST * 1e-3 * experiment.launch.total_power_mw / 255.0
        self._rows: dict[int, Real] = {}

    def launch(self) -> Field:
        """The field of realization 0; its row is the first."""
        field = self.passage.fields(range(1))
        self.keep(-1, field)
        return field

    def keep(self, row: int, field: Field) -> None:
        """Take a row from a field; one that comes again is the better one."""
        self._rows[row] = column_powers(field[0], self._columns)

    def picture(self) -> Picture:
        """The rows kept, as levels."""
        rows = np.stack(list(self._rows.values()))
        return Picture(map_levels(rows, self._scale_w), self._scale_w)


def _picture(passage: Passage, schedule: Schedule) -> tuple[Picture, Outcome]:
    """The map of realization 0, in steps as long as the schedule's or shorter."""
    whole = _Map(passage)
    legs = _refined(schedule)
    trip = whole.passage.travel(whole.launch(), legs, observe=whole.keep)
    return whole.picture(), trip.outcome


def _refined(schedule: Schedule) -> Schedule:
    """A schedule of a map's legs from one of other legs of the same line."""
    return tuple(schedule[leg * len(schedule) // MAP_LEGS] for leg in range(MAP_LEGS))


def run_map(task: MapTask) -> MapPart:
    """One part of the live map: a preview with the steps expected from the launch alone.

    The first round of the same point replaces it by a map whose steps have been checked.
    """
    whole = _Map(Passage(task.experiment, MAP_LEGS))
    if whole.passage.expected_steps > STEP_LIMIT:
        return MapPart(TOO_FINE.kind)
    field = whole.launch() if task.field is None else task.field
    leg = task.leg or whole.passage.expected()[0]
    parts = map_parts(task.experiment)
    legs = MAP_LEGS // parts
    first = task.part * legs
    trip = whole.passage.travel(field, (leg,) * legs, first=first, observe=whole.keep)
    if trip.outcome.kind != "completed":
        return MapPart(trip.outcome.kind)
    first_row = 0 if task.part == 0 else task.part * MAP_ROWS // parts + 1
    if task.part + 1 == parts:
        return MapPart("completed", first_row, whole.picture())
    return MapPart("completed", first_row, whole.picture(), trip.field, trip.schedule[-1])
