"""What one worker computes: a round of realizations, or a part of the map that is watched live.

Both are pure functions of what the task holds, so any of them may be run again, anywhere.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from solver.experiment import Experiment
from solver.grid import Complex, Field, Grid, Real
from solver.kernels import column_powers, intensity_moments
from solver.propagation import (
    STEP_LIMIT,
    edge_limit,
    relative_error,
    richardson,
    scheme_for,
)
from solver.receiver import detect
from solver.relation import input_response
from solver.result import MAP_COLUMNS, MAP_ROWS, LinearRegime, Picture
from solver.source import draw, synthesize
from solver.statistics import Layout, central, features, moments, sums_and_squares
from solver.task import Findings, MapPart, MapTask, RoundOutcome, RoundTask
from solver.theory import linear_correlations
from solver.track import COMPLETED, Light, Outcome, Piece, Track
from solver.transforms import COMPLEX, Transforms, batch_size, transforms

CHECKED = 4
"""Realizations on which the steps are found and the discretization error is measured."""
PATIENCE = 3
"""Times a pilot takes half as many steps again before a full band is put down to the light."""
PILOT_GUARD = 1 / 30
"""The pilot stays this much clearer of a band ended by its steps than the ensemble must."""
MAP_PARTS = 16
"""Parts in which the live map is computed, so that it can be watched growing."""
BRIGHTEST = 3.0
"""Top of a map's power scale, in units of the total launch power."""


class Bench:
    """An experiment made ready to run on one time step: response, track, scheme."""

    def __init__(self, experiment: Experiment, refinement: int, recorded_km: Sequence[float]):
        ensemble = experiment.ensemble
        self.experiment = experiment
        self.precision = ensemble.precision
        self.layout = Layout.of(ensemble)
        self.grid = Grid(ensemble.samples * refinement, ensemble.time_step_ps / refinement)
        self.response: Complex = input_response(experiment, self.grid)
        density = np.sum(np.abs(self.response) ** 2, axis=(0, 1))
        # Gaussian light has more power where it is bright: ⟨P²⟩ = 1.5 ⟨P⟩² for two equal parts.
        self.light = Light(1.5 * float(density.sum()), density / density.sum())
        self.track = Track(
            experiment.line,
            self.grid,
            wavelength_nm=experiment.source.wavelength_nm,
            recorded_km=recorded_km,
            fibre_seed=ensemble.seed,
        )
        self.tolerance = ensemble.field_tolerance
        self.scheme = scheme_for(self.tolerance)
        self.edge_limit = edge_limit(self.tolerance, self.precision)

    def fields(self, realizations: range) -> Field:
        """Launched fields, √W, shape (realizations, 2, samples), in the ensemble's precision."""
        noise = draw(self.experiment.ensemble.seed, realizations, self.grid)
        return synthesize(noise, self.response).astype(COMPLEX[self.precision])

    def expected_steps(self) -> int:
        """Steps that should meet the tolerance, judged from the launch alone, within the limit."""
        expected = self.track.expected_steps(self.scheme, self.light, self.tolerance)
        expected = min(expected, float(STEP_LIMIT))
        return sum(piece.steps for piece in self.pieces(np.ceil(expected)))

    def pieces(self, steps: float) -> list[Piece]:
        """The line in about ``steps`` steps."""
        return self.track.pieces(self.scheme, self.light, steps)

    def work(self, realizations: int) -> Transforms:
        """Transforms for a batch of this many realizations."""
        return transforms(realizations, self.grid.samples, self.precision)

    def _moments(self, field: Field) -> Real:
        receiver = self.experiment.receiver
        if receiver.filter == "none" and receiver.extinction_db is None:
            return np.asarray(intensity_moments(field))
        return moments(detect(field, receiver, self.grid))

    def run(
        self, fields: Field, pieces: Sequence[Piece], guard: float = 1.0
    ) -> tuple[Field, Real, Outcome]:
        """Propagate; returns fields at the end, moments (realizations, distances, 5), outcome."""
        arrived = np.empty_like(fields)
        recorded = np.empty((len(fields), self.layout.distances, 5))
        batch = batch_size(self.grid.samples)
        for start in range(0, len(fields), batch):
            rows = slice(start, min(start + batch, len(fields)))
            work = self.work(rows.stop - rows.start)
            work.buffer[:] = fields[rows]
            recorded[rows, 0] = self._moments(work.buffer)

            def observe(index: int, here: Field, rows: slice = rows) -> None:
                recorded[rows, index] = self._moments(here)

            outcome = self.track.march(
                work,
                pieces,
                self.scheme,
                self.precision,
                edge_limit=self.edge_limit,
                guard=guard,
                observe=observe,
            )
            if outcome.kind != "completed":
                return arrived, recorded, outcome
            arrived[rows] = work.buffer
        return arrived, recorded, COMPLETED


def _distances_km(experiment: Experiment) -> list[float]:
    length, parts = experiment.length_km, experiment.ensemble.distances
    return [length * (i + 1) / parts for i in range(parts)]


@dataclass(frozen=True)
class Pilot:
    """Steps that meet the field tolerance, found on a few realizations, and what they cost C12.

    discretization_error: distance of C12(0) of these realizations from its limit of small
    steps, estimated from a run with twice the steps, realization by realization.
    """

    steps: int
    discretization_error: float
    transforms: int
    outcome: Outcome = COMPLETED


def pilot(bench: Bench, fields: Field, fewest: int) -> Pilot:
    """Find the steps for a whole ensemble on a few of its realizations, which are all alike."""
    scheme, order = bench.scheme, bench.scheme.order
    steps, spent, added = float(max(fewest, bench.expected_steps())), 0, 0
    while True:
        if steps >= STEP_LIMIT:
            return Pilot(
                round(steps),
                np.nan,
                spent,
                Outcome(
                    "tolerance_not_met",
                    "the steps needed are too many: loosen field_tolerance, or lower the power "
                    "or the length",
                ),
            )
        runs = []
        outcome = COMPLETED
        for factor in (1.0, 2.0):
            pieces = bench.pieces(factor * steps)
            count = sum(piece.steps for piece in pieces)
            spent += count * scheme.transforms_per_step
            field, recorded, outcome = bench.run(fields, pieces, PILOT_GUARD)
            if outcome.kind != "completed":
                break
            runs.append((count, field, recorded[:, -1].mean(axis=0)))
        if outcome.kind == "steps_too_long" or (outcome.kind == "aliased" and added < PATIENCE):
            # Steps that are too long scatter energy to the edges of the band by themselves.
            steps, added = 1.5 * steps, added + 1
            continue
        if outcome.kind != "completed":
            return Pilot(count, np.nan, spent, outcome)
        (coarse, field, seen), (fine, finer, seen_finer) = runs
        if bench.track.commutes(scheme, bench.light):
            return Pilot(coarse, 0.0, spent)
        ratio = (fine / coarse) ** order
        error = richardson(relative_error(field, finer), fine / coarse, order) * ratio
        if error <= bench.tolerance:
            shift = abs(float(central(seen) - central(seen_finer)))
            return Pilot(coarse, shift * ratio / (ratio - 1.0), spent)
        growth = (1.2 * error / bench.tolerance) ** (1 / order)
        steps = coarse * min(max(growth, 1.2), 8.0)


def run_round(task: RoundTask) -> RoundOutcome:
    """Realizations ``task.first`` and following; the first round also finds the steps."""
    experiment = task.experiment
    bench = Bench(experiment, task.refinement, _distances_km(experiment))
    fields = bench.fields(range(task.first, task.first + task.count))
    steps, spent, findings = task.steps, 0, None
    if steps is None:
        found = pilot(bench, fields[:CHECKED], task.fewest)
        if found.outcome.kind != "completed":
            return RoundOutcome(found.outcome.kind, found.outcome.advice)
        steps, spent = found.steps, found.transforms
        picture, outcome = _picture(experiment, task.refinement, steps)
        if outcome.kind != "completed":
            return RoundOutcome(outcome.kind, outcome.advice, steps=steps)
        linear = _linear_regime(experiment, bench.layout)
        findings = Findings(steps, found.discretization_error, picture, linear)
    pieces = bench.pieces(steps)
    arrived, recorded, outcome = bench.run(fields, pieces)
    if outcome.kind != "completed":
        return RoundOutcome(outcome.kind, outcome.advice, steps=steps)
    detected = detect(arrived, experiment.receiver, bench.grid)
    blocks, means = features(bench.layout, fields, arrived, detected, recorded)
    spent += sum(piece.steps for piece in pieces) * bench.scheme.transforms_per_step
    sums = sums_and_squares(means)
    return RoundOutcome("completed", "", blocks, sums, spent, steps, findings)


def _linear_regime(experiment: Experiment, layout: Layout) -> LinearRegime:
    found = linear_correlations(experiment, layout.grid)
    lags = np.arange(-layout.lags, layout.lags + 1) * layout.lag_stride
    return LinearRegime(
        found.auto1[lags], found.auto2[lags], found.sum[lags], found.cross[lags], found.moment_cross
    )


class _Map:
    """A bench for one realization, recording the rows of a map."""

    def __init__(self, experiment: Experiment, refinement: int, steps: float | None) -> None:
        length = experiment.length_km
        distances_km = [length * (i + 1) / MAP_ROWS for i in range(MAP_ROWS)]
        self.bench = Bench(experiment, refinement, distances_km)
        if steps is None:
            steps = self.bench.expected_steps() * refinement
        self.pieces = self.bench.pieces(steps)
        self._columns = min(MAP_COLUMNS, experiment.ensemble.samples)
        self._scale_w = BRIGHTEST * 1e-3 * experiment.launch.total_power_mw / 255.0
        self._rows: list[Real] = []

    def launch(self) -> Field:
        """The field of realization 0; its row is the first."""
        field = self.bench.fields(range(1))
        self._keep(field)
        return field

    def _keep(self, field: Field) -> None:
        self._rows.append(column_powers(field[0], self._columns))

    def march(self, field: Field, pieces: Sequence[Piece]) -> tuple[Field, Outcome]:
        """Keep a row for each recorded distance; the field at the end and the outcome."""
        work = self.bench.work(1)
        work.buffer[:] = field
        outcome = self.bench.track.march(
            work,
            pieces,
            self.bench.scheme,
            self.bench.precision,
            edge_limit=self.bench.edge_limit,
            guard=1.0,
            observe=lambda _, here: self._keep(here),
        )
        return np.array(work.buffer), outcome

    def picture(self) -> Picture:
        """The rows kept, as levels."""
        first, second = np.stack(self._rows, axis=1)
        total = first + second
        contrast = (first - second) / np.where(total > 0.0, total, 1.0)
        scaled = [127.5 * (contrast + 1.0), first / self._scale_w, second / self._scale_w]
        levels = np.clip(np.rint(np.stack(scaled)), 0, 255).astype(np.uint8)
        return Picture(levels, self._scale_w)


def _picture(experiment: Experiment, refinement: int, steps: int) -> tuple[Picture, Outcome]:
    whole = _Map(experiment, refinement, steps)
    _, outcome = whole.march(whole.launch(), whole.pieces)
    return whole.picture(), outcome


def run_map(task: MapTask) -> MapPart:
    """One part of the live map: a preview with the steps expected from the launch alone.

    The first round of the same point replaces it by a map whose steps have been checked.
    """
    whole = _Map(task.experiment, task.refinement, None)
    field = whole.launch() if task.field is None else task.field
    per_part = MAP_ROWS // MAP_PARTS
    ends = np.flatnonzero([piece.recorded for piece in whole.pieces]) + 1
    start = 0 if task.part == 0 else ends[task.part * per_part - 1]
    stop = ends[(task.part + 1) * per_part - 1]
    field, outcome = whole.march(field, whole.pieces[start:stop])
    if outcome.kind != "completed":
        return MapPart(outcome.kind)
    first_row = 0 if task.part == 0 else task.part * per_part + 1
    last = task.part + 1 == MAP_PARTS
    return MapPart("completed", first_row, whole.picture(), None if last else field)
