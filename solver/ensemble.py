"""What one worker computes: a round of realizations, or a part of the map that is watched live.

Both are pure functions of what the task holds, so any of them may be run again, anywhere.
"""

import math
import time
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from solver.budget import GridUse
from solver.detection import Detection
from solver.experiment import Experiment
from solver.extent import broadened_ghz, spread_ps
from solver.features import Observed, features
from solver.findings import Invariants, LinearRegime, Picture
from solver.grid import Field, Real
from solver.invariants import drifts
from solver.kernels import column_powers, column_stokes, intensity_moments, map_levels
from solver.passage import Passage, Trip
from solver.planning import scales
from solver.propagation import STEP_LIMIT, relative_error
from solver.result import MAP_COLUMNS, MAP_ROWS
from solver.statistics import Blocks, Layout, central, sums_and_squares
from solver.task import (
    APART,
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
from solver.track import COMPLETED, Outcome, edge_share
from solver.transforms import batches, resampled

PILOT_GUARD = 1 / 3
"""The pilot stays this much clearer of a band ended by its steps than the ensemble must."""
MAP_LEGS = 16
"""Parts of the line after which the light of a map is looked at; each has some of its rows."""
COARSER = 1.6
"""Ratio of the numbers of steps of two runs that are compared."""
SLACK = 2.0
"""What a receiver may see of bias over what the light itself may have."""
STALLED = 0.9
"""Ratio of two errors above which the shorter steps of the second were of no use."""
BRIGHTEST = 3.0
"""Top of a map's power scale, in units of the total launch power."""


@dataclass(frozen=True)
class Seen:
    """A batch at the end of the line: its trip, and what each receiver saw at each distance.

    moments: shape (receivers, realizations, distances, 5); walls: without the last axis.
    """

    launched: Field
    realizations: range
    trip: Trip
    moments: Real
    walls: Real


class Bench:
    """A passage and the receivers that look at what passes.

    experiments: of one or more points, which differ behind the line only.
    """

    def __init__(self, *experiments: Experiment) -> None:
        self.experiments = experiments
        self.layouts = [Layout.of(e.ensemble, e.receiver) for e in experiments]
        self.passage = Passage(experiments[0], experiments[0].ensemble.distances)
        self.detections = [Detection(e) for e in experiments]

    def follow(
        self, launched: Field, realizations: range, schedule: Schedule, guard: float = 1.0
    ) -> Seen:
        """Take a batch down the line."""
        shape = len(self.experiments), len(launched), self.layouts[0].distances
        moments, walls = np.empty((*shape, 5)), np.empty(shape)

        def look(at: int, field: Field) -> None:
            sight = self.detections[0].sight(field)
            for index, detection in enumerate(self.detections):
                found = detection.along(sight, realizations)
                moments[index, :, at], walls[index, :, at] = found

        look(0, launched)
        trip = self.passage.travel(
            launched,
            schedule,
            realizations=realizations,
            guard=guard,
            observe=lambda leg, field: look(leg + 1, field),
            phases=any(detection.reads_phases for detection in self.detections),
        )
        return Seen(launched, realizations, trip, moments, walls)

    def features(self, seen: Seen) -> list[tuple[Real, Real]]:
        """Feature vectors of a batch for the accumulators of each receiver."""
        made = []
        for index, detection in enumerate(self.detections):
            received = detection.received(seen.trip.field, seen.realizations)
            observed = Observed(
                launched=seen.launched,
                arrived=seen.trip.field,
                received=received,
                detected=detection.detected(received, seen.realizations),
                received_w=detection.received_w,
                detected_w=detection.mean_w,
                known_noise_w2=detection.known_noise_w2,
                moments=seen.moments[index],
                walls=seen.walls[index],
            )
            made.append(features(self.layouts[index], observed))
        return made


@dataclass(frozen=True)
class Pilot:
    """A schedule for the whole ensemble, found on a few realizations, and what it costs C12(0).

    seen: these realizations, on that schedule or one of shorter steps; biases: distance of
    C12(0) at the end from its limit of small steps, estimated on them, as each receiver sees it;
    fits: whether that is as little as is allowed.
    """

    schedule: Schedule
    biases: Sequence[float]
    fits: Sequence[bool]
    transforms: int
    seen: Seen
    outcome: Outcome = COMPLETED


TOO_FINE = Outcome(
    "tolerance_not_met",
    "steps and samples needed are too many: loosen field_tolerance or standard_error_target, or "
    "lower the power or the length",
)


def pilot(bench: Bench, launched: Field, realizations: range) -> Pilot:
    """Find steps and grid for a whole ensemble on a few of its realizations, which are all alike.

    The rule: the bias of C12(0) at the end of the line, plus two of its own standard errors,
    stays under BIAS_SHARE of the standard error that is aimed at, and the field's error under the
    field tolerance. Both are judged from a second run with fewer steps (or more, where there is
    but one on each leg), by Richardson's argument, realization by realization.

    C12(0) is that of the light itself, so that all receivers of the same light share a schedule.
    Where a receiver sees more than SLACK times the bias allowed, it does not fit; one that is
    alone then has the schedule made for it.
    """
    passage = bench.passage
    order = passage.scheme.order
    schedule, spent = passage.expected(), 0
    other: Trip | None = None
    previous_excess = math.inf
    demanding = False
    while True:
        seen = bench.follow(launched, realizations, schedule, PILOT_GUARD)
        trip = seen.trip
        spent += trip.transforms
        schedule = trip.schedule
        if trip.outcome.kind != "completed" or not passage.weights.any():
            return _without_bias(bench, schedule, spent, seen, trip.outcome)
        most = max(leg.steps for leg in schedule)
        if any(leg.steps < most for leg in schedule):
            # Steps that grew on the way grow from the start: see Track.pieces.
            schedule = tuple(replace(leg, steps=most) for leg in schedule)
            continue
        if other is None or trip.steps < COARSER * other.steps:
            other = _compared(passage, trip, launched, realizations)
            spent += other.transforms
            if other.outcome.kind != "completed":
                return _without_bias(bench, schedule, spent, seen, other.outcome)
        # An error of c/N^p in one and c/M^p in the other: their difference tells c.
        scale = abs((trip.steps / other.steps) ** order - 1.0)
        field = resampled(other.field, trip.field.shape[2])
        error = relative_error(field, trip.field) / scale
        light = _shift(intensity_moments(trip.field), intensity_moments(field), scale)
        sight = bench.detections[0].sight(field)
        shifts = [
            _shift(moments[:, -1], detection.moments(sight, realizations), scale)
            for moments, detection in zip(seen.moments, bench.detections, strict=True)
        ]
        excess = max(error / passage.field_tolerance, light.most / passage.bias_allowed)
        needs = [shift.most / passage.bias_allowed for shift in shifts]
        alone = len(needs) == 1 and excess <= 1.0 and not demanding
        if alone and needs[0] > SLACK * _fewer(passage, trip, excess)[1] ** order:
            demanding, previous_excess = True, math.inf
        if demanding:
            excess = max(excess, needs[0])
        if excess <= 1.0:
            schedule, share = _fewer(passage, trip, excess)
            biases = [shift.bias / share**order for shift in shifts]
            fits = [len(needs) == 1 or need <= SLACK * share**order for need in needs]
            return Pilot(schedule, biases, fits, spent, seen)
        if excess > STALLED * previous_excess:
            # Shorter steps do not help: what is left is cut off by the band.
            widest = schedule[-1].samples
            if schedule[0].samples == widest:
                widest *= 2
            if widest > passage.widest:
                return _without_bias(bench, schedule, spent, seen, TOO_FINE)
            schedule = tuple(replace(leg, samples=widest) for leg in schedule)
            other, previous_excess = None, math.inf
            continue
        previous_excess = excess
        # An excess found with steps this long says little of how many it takes.
        growth = min(max((1.2 * excess) ** (1 / order), 1.2), COARSER)
        if trip.steps * growth > STEP_LIMIT:
            return _without_bias(bench, schedule, spent, seen, TOO_FINE)
        # A leg has one step at least: fewer steps than legs grow from there.
        growth *= max(1.0, trip.steps / max(leg.steps for leg in schedule))
        schedule, other = _scaled(schedule, growth), trip


def _without_bias(
    bench: Bench, schedule: Schedule, transforms: int, seen: Seen, outcome: Outcome
) -> Pilot:
    count = len(bench.experiments)
    return Pilot(schedule, [0.0] * count, [True] * count, transforms, seen, outcome)


def _fewer(passage: Passage, trip: Trip, excess: float) -> tuple[Schedule, float]:
    """A schedule for so little of what is allowed, and its share of the steps: as few as have
    just been tried may do."""
    order = passage.scheme.order
    fewer = _scaled(trip.schedule, max((1.2 * excess) ** (1 / order), 1 / COARSER))
    saved = passage.steps(fewer) / trip.steps
    if saved > 0.95 / COARSER and excess <= saved**order:
        return fewer, saved
    return trip.schedule, 1.0


def _scaled(schedule: Schedule, factor: float) -> Schedule:
    return tuple(replace(leg, steps=math.ceil(leg.steps * factor)) for leg in schedule)


def _compared(passage: Passage, trip: Trip, launched: Field, realizations: range) -> Trip:
    """The same fields in fewer steps than a trip took, or in more where that cannot be."""
    samples = trip.field.shape[2]
    coarse = passage.watched(1)
    for steps in (trip.steps / COARSER, COARSER * trip.steps):
        leg = Leg(samples, round(steps))
        count = sum(piece.steps for piece in coarse.pieces(leg)[0])
        if abs(math.log(count / trip.steps)) > 0.7 * math.log(COARSER):
            break
    launched = resampled(launched, samples)
    return coarse.travel(launched, (leg,), realizations=realizations, checked=False)


@dataclass(frozen=True)
class _Shift:
    """What a number of steps does to C12(0), and the standard error of that."""

    bias: float
    unsure: float

    @property
    def most(self) -> float:
        return self.bias + 2.0 * self.unsure


def _shift(moments: Real, others: Real, scale: float) -> _Shift:
    """C12(0) of the same realizations computed in two ways: the difference over a scale."""
    paired = Blocks(10)
    paired.add(np.concatenate([moments, others], axis=1))
    value, error = paired.estimate(lambda m: (central(m[..., :5]) - central(m[..., 5:]))[..., None])
    unsure = float(error[0]) / scale
    return _Shift(abs(float(value[0])) / scale, unsure if math.isfinite(unsure) else 0.0)


def run_round(task: RoundTask) -> RoundOutcome:
    """Realizations ``task.first`` and following; the first round also finds the schedule."""
    start_s = time.perf_counter()
    bench = Bench(*task.experiments())
    if bench.passage.expected_steps > STEP_LIMIT:
        return _ended(TOO_FINE, bench)
    schedule = task.schedule
    piloted: Pilot | None = None
    picture: Picture | None = None
    spent: list[int] = []
    blocks: list[list[Real]] = [[] for _ in bench.experiments]
    sums: list[list[Real]] = [[] for _ in bench.experiments]
    for chunk in chunks(task.experiment.ensemble.samples, task.first, task.count):
        launched = bench.passage.fields(chunk)
        found = []
        rows = range(len(chunk))
        spent.append(0)
        if schedule is None:
            rows = rows[PILOTED:]
            piloted = pilot(bench, launched[:PILOTED], chunk[:PILOTED])
            outcome = piloted.outcome
            if outcome.kind == "completed":
                schedule, spent[-1] = piloted.schedule, piloted.transforms
                picture, outcome = _picture(bench.passage, schedule)
            if outcome.kind != "completed" or schedule is None:
                return _ended(outcome, bench)
            found.append(bench.features(piloted.seen))
        for batch in batches(rows, max(leg.samples for leg in schedule)):
            part = slice(batch.start, batch.stop)
            seen = bench.follow(launched[part], chunk[part], schedule)
            spent[-1] += seen.trip.transforms
            if seen.trip.outcome.kind != "completed":
                return _ended(seen.trip.outcome, bench)
            found.append(bench.features(seen))
        for index, parts in enumerate(zip(*found, strict=True)):
            for_blocks, for_means = zip(*parts, strict=True)
            blocks[index] += for_blocks
            sums[index].append(sums_and_squares(np.concatenate(for_means)))
    seconds = time.perf_counter() - start_s

    def told(index: int) -> RoundOutcome:
        findings = None
        if piloted is not None and picture is not None:
            if not piloted.fits[index]:
                return RoundOutcome(APART)
            findings = _findings(bench, index, piloted, picture)
        return RoundOutcome(
            "completed",
            blocks=np.concatenate(blocks[index]),
            sums=np.stack(sums[index]),
            transforms=tuple(spent),
            seconds=seconds,
            findings=findings,
        )

    own, *others = (told(index) for index in range(len(bench.experiments)))
    return replace(own, beside=tuple(others))


def _ended(outcome: Outcome, bench: Bench) -> RoundOutcome:
    """The light itself ended the round, for all who look at it."""
    made = RoundOutcome(outcome.kind, outcome.advice)
    return replace(made, beside=(made,) * (len(bench.experiments) - 1))


def _findings(bench: Bench, index: int, piloted: Pilot, picture: Picture) -> Findings:
    experiment = bench.experiments[index]
    return Findings(
        piloted.schedule,
        bench.passage.steps(piloted.schedule),
        piloted.biases[index],
        picture,
        _linear_regime(experiment, bench.layouts[index], bench.passage),
        _invariants(bench, piloted.seen),
        scales(experiment),
        _grid_use(experiment, piloted.seen.trip, bench.passage.edge_limit),
    )


def _invariants(bench: Bench, seen: Seen) -> Invariants:
    arrived = seen.trip.field
    samples = max(seen.launched.shape[2], arrived.shape[2])
    made = bench.passage.track(samples).sections
    return drifts(made, seen.launched, arrived, bench.layouts[0].grid.window_ps)


def _grid_use(experiment: Experiment, trip: Trip, edge_limit: float) -> GridUse:
    ensemble = experiment.ensemble
    half = trip.field.shape[2] // 2
    return GridUse(
        window_ps=ensemble.window_ps,
        samples_asked=ensemble.samples,
        longest_lag_ps=ensemble.max_lag_ps,
        target=ensemble.standard_error_target,
        most=ensemble.max_realizations,
        spread_ps=spread_ps(experiment, 2.0 * broadened_ghz(experiment)),
        edge_share=edge_share(np.fft.fft(trip.field), half),
        edge_limit=edge_limit,
    )


def _linear_regime(experiment: Experiment, layout: Layout, passage: Passage) -> LinearRegime:
    found = linear_correlations(experiment, layout.grid)
    step = layout.lag_stride * (layout.grid.samples // layout.detected.samples)
    lags = np.arange(-layout.lags, layout.lags + 1) * step
    launched = launched_central(experiment, passage.grid(passage.start_samples))
    return LinearRegime(
        found.auto1[lags],
        found.auto2[lags],
        found.sum[lags],
        found.cross[lags],
        found.moment_cross,
        launched,
    )


class _Map:
    """A passage of one realization, watched at the rows of a map.

    polarized: whether S2 and S3 are kept too, from fields whose phases are settled.
    """

    def __init__(self, passage: Passage, *, polarized: bool = False) -> None:
        experiment = passage.experiment
        self.passage = passage.watched(MAP_LEGS, MAP_ROWS // MAP_LEGS)
        self._columns = min(MAP_COLUMNS, experiment.ensemble.samples)
        self._scale_w = BRIGHTEST * 1e-3 * experiment.launch.total_power_mw / 255.0
        self._polarized = polarized
        self._rows: dict[int, Real] = {}

    def launch(self) -> Field:
        """The field of realization 0; its row is the first."""
        field = self.passage.fields(range(1))
        self.keep(-1, field)
        return field

    def keep(self, row: int, field: Field) -> None:
        """Take a row from a field; one that comes again is the better one."""
        read = column_stokes if self._polarized else column_powers
        self._rows[row] = read(field[0], self._columns)

    def picture(self) -> Picture:
        """The rows kept, as levels."""
        rows = np.stack(list(self._rows.values()))
        return Picture(map_levels(rows, self._scale_w), self._scale_w)


def _picture(passage: Passage, schedule: Schedule) -> tuple[Picture, Outcome]:
    """The map of realization 0, in steps as long as the schedule's or shorter."""
    whole = _Map(passage, polarized=True)
    legs = _refined(schedule)
    trip = whole.passage.travel(
        whole.launch(), legs, realizations=range(1), observe=whole.keep, phases=True
    )
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
    trip = whole.passage.travel(
        field, (leg,) * legs, realizations=range(1), first=first, observe=whole.keep
    )
    if trip.outcome.kind != "completed":
        return MapPart(trip.outcome.kind)
    first_row = 0 if task.part == 0 else task.part * MAP_ROWS // parts + 1
    if task.part + 1 == parts:
        return MapPart("completed", first_row, whole.picture())
    return MapPart("completed", first_row, whole.picture(), trip.field, trip.schedule[-1])
