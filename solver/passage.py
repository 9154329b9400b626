"""The fields of an experiment down its line, on a grid and in steps that follow the light.

A line is watched at equal parts of its length. Between two watched distances, on a leg, the
window has some number of samples and the steps have some length; where the spectrum fills its
band the leg is gone over again on twice the samples, and where it reaches a band ended by the
splitting itself, in shorter steps. What a few realizations needed serves all others, which are
statistically alike; one that needs more than they did widens its own grid on the way.
"""

import math
from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np

from solver.experiment import Experiment
from solver.fibre import Section, drawn_axes, fibres_are_drawn, sections
from solver.grid import Complex, Field, Grid
from solver.propagation import STEP_LIMIT, edge_limit, scheme_for
from solver.relation import input_response
from solver.source import BOOSTER, SOURCE, draw, synthesize
from solver.task import Leg, Schedule
from solver.track import (
    COMPLETED,
    EDGE,
    Light,
    Observer,
    Outcome,
    Piece,
    Track,
    Wave,
    expected_steps,
)
from solver.transforms import COMPLEX

BIAS_SHARE = 0.1
"""Bias of C12(0) allowed, in units of the standard error that is aimed at."""
FIELD_FOR_BIAS = 10.0
"""Measured on the headline study: a field error this many times the bias allowed keeps to it."""
EDGE_FOR_BIAS = 0.1
"""Share of the energy allowed at the edges of the band, in units of the bias allowed."""
START_GUARD = 1 / 30
"""The light at the launch stays this much clearer of the edges."""
FEWEST_SAMPLES = 1024
"""The narrowest grid still has a sample for each column of a map."""
MOST_REFINED = 4
"""How far the time step may be divided when the spectrum fills the band."""
NOISE_KEPT_BYTES = 2**22
"""Draws up to this size are kept: every point of a study draws the same noise."""


@dataclass(frozen=True)
class Trip:
    """Where fields came to: √W, (realizations, 2, samples of the last leg), phases settled."""

    field: Field
    schedule: Schedule
    steps: int
    transforms: int
    outcome: Outcome


class Passage:
    """An experiment made ready to run: launch, line, scheme, and the limits of its band.

    legs: equal parts of the line at whose ends the field is watched. rows: equal parts of each
    leg at whose ends it is observed, at the end of the leg if there is one row.
    """

    def __init__(self, experiment: Experiment, legs: int, rows: int = 1) -> None:
        ensemble = experiment.ensemble
        self.experiment = experiment
        self.legs, self.rows = legs, rows
        self.precision = ensemble.precision
        self.bias_allowed = BIAS_SHARE * ensemble.standard_error_target
        self.field_tolerance = ensemble.field_tolerance
        self._expected_error = min(self.field_tolerance, FIELD_FOR_BIAS * self.bias_allowed)
        self.scheme = scheme_for(self._expected_error)
        self.edge_limit = min(
            edge_limit(self.field_tolerance, self.precision),
            EDGE_FOR_BIAS * self.bias_allowed,
        )
        self._sections: dict[int, list[Section]] = {}
        self._tracks: dict[int, Track] = {}
        self._pieces: dict[Leg, list[list[Piece]]] = {}

    def watched(self, legs: int, rows: int = 1) -> "Passage":
        """The same passage, watched at the ends of other parts."""
        other = Passage(self.experiment, legs, rows)
        other._sections = self._sections
        other.start_samples, other.response = self.start_samples, self.response
        return other

    def grid(self, samples: int) -> Grid:
        """The window in this many samples."""
        return Grid(samples, self.experiment.ensemble.window_ps / samples)

    @cached_property
    def start_samples(self) -> int:
        """Samples of the narrowest grid that holds the light at the launch."""
        asked = self.experiment.ensemble.samples
        response = input_response(self.experiment, self.grid(asked))
        density = np.sum(np.abs(response) ** 2, axis=(0, 1))
        from_carrier = np.abs(np.fft.fftfreq(asked) * asked)
        samples = asked
        while samples // 2 >= FEWEST_SAMPLES:
            beyond = density[from_carrier >= (1 - EDGE) * samples / 4].sum()
            if beyond > START_GUARD * self.edge_limit * density.sum():
                break
            samples //= 2
        return samples

    @cached_property
    def response(self) -> Complex:
        """Response of the launch on the grid it starts on, √W, (2, 2 draws, samples)."""
        return input_response(self.experiment, self.grid(self.start_samples))

    @cached_property
    def light(self) -> Light:
        """What the choice of steps needs to know of the light."""
        density = np.sum(np.abs(self.response) ** 2, axis=(0, 1))
        # Gaussian light has more power where it is bright: ⟨P²⟩ = 1.5 ⟨P⟩² for two equal parts.
        return Light(1.5 * float(density.sum()), density / density.sum())

    def fields(self, realizations: range) -> Field:
        """Launched fields, √W, shape (realizations, 2, start_samples), in the precision asked."""
        complex_type = COMPLEX[self.precision]
        size = len(realizations) * 2 * self.start_samples * np.dtype(complex_type).itemsize
        noise = (_kept_noise if size <= NOISE_KEPT_BYTES else _noise)(
            self.experiment.ensemble.seed,
            realizations,
            self.grid(self.start_samples),
            self.response.shape[1] > 2,
            complex_type,
        )
        return synthesize(noise, self.response.astype(complex_type))

    def track(self, samples: int) -> Track:
        """The line on a grid of this many samples."""
        if samples not in self._tracks:
            experiment, grid = self.experiment, self.grid(samples)
            if samples not in self._sections:
                self._sections[samples] = sections(
                    experiment.line,
                    grid,
                    experiment.source.wavelength_nm,
                    experiment.ensemble.seed,
                )
            parts = self.legs * self.rows
            ends = [experiment.length_km * (i + 1) / parts for i in range(parts)]
            self._tracks[samples] = Track(self._sections[samples], grid, ends)
        return self._tracks[samples]

    def axes(self, realizations: range | None) -> list[Complex | None] | None:
        """Axes of the sections of these realizations' own fibres; None where all share one."""
        if not fibres_are_drawn(self.experiment):
            return None
        if realizations is None:
            raise ValueError("each realization has a fibre of its own: say which these are")
        return drawn_axes(self.experiment.line, self.experiment.ensemble.seed, realizations)

    @cached_property
    def weights(self) -> np.ndarray:
        """What :meth:`Track.weights` says of the line and the light at the launch."""
        return self.track(self.start_samples).weights(self.scheme, self.light)

    @cached_property
    def expected_steps(self) -> float:
        """Steps that should keep the bias within what is allowed, judged from the launch alone."""
        return expected_steps(self.weights, self.scheme, self._expected_error)

    def expected(self) -> Schedule:
        """The expected steps, on the narrowest grid."""
        return self.evenly(self.start_samples, math.ceil(self.expected_steps))

    def evenly(self, samples: int, steps: int) -> Schedule:
        """The same grid and density of steps all along."""
        return (Leg(samples, steps),) * self.legs

    def pieces(self, leg: Leg) -> list[list[Piece]]:
        """The line in this leg's kind of steps, leg by leg."""
        if leg not in self._pieces:
            made: list[list[Piece]] = [[]]
            row = 0
            for piece in self.track(leg.samples).pieces(self.weights, leg.steps):
                made[-1].append(piece)
                row += piece.recorded
                if piece.recorded and row % self.rows == 0:
                    made.append([])
            self._pieces[leg] = made[:-1]
        return self._pieces[leg]

    @property
    def widest(self) -> int:
        """Samples of the finest grid that is tried."""
        return MOST_REFINED * self.experiment.ensemble.samples

    def steps(self, schedule: Schedule) -> int:
        """Steps down the whole line."""
        legs = (self.pieces(leg)[index] for index, leg in enumerate(schedule))
        return sum(piece.steps for pieces in legs for piece in pieces)

    def travel(
        self,
        field: Field,
        schedule: Schedule,
        *,
        realizations: range | None = None,
        first: int = 0,
        guard: float = 1.0,
        checked: bool = True,
        observe: Observer | None = None,
        phases: bool = False,
    ) -> Trip:
        """Take launched fields, or those at the end of leg ``first`` − 1, down a schedule.

        realizations: their numbers; needed where each of them has a fibre of its own.
        guard: see :meth:`Track.march`. Unchecked, the schedule is kept whatever the light does.
        observe: called with the number of each row of the line and a field whose powers are right
        at its end, and its phases too if ``phases`` asks for them; once more when its leg is gone
        over again. The trip's schedule tells what the legs took.
        """
        wave = Wave(field)
        limit = self.edge_limit if checked else math.inf
        axes = self.axes(realizations)
        if not self.weights.any():
            guard = 0.0  # without the Kerr effect no step makes sidebands
        done: list[Leg] = []
        steps = spent = fewest = 0
        outcome = COMPLETED
        for index, planned in enumerate(schedule, first):
            leg = Leg(max(planned.samples, wave.field.shape[2]), max(planned.steps, fewest))
            while True:
                kept = wave.kept()
                if leg.samples > wave.field.shape[2]:
                    wave = kept.again(leg.samples)
                pieces = self.pieces(leg)[index]
                outcome = self.track(leg.samples).march(
                    wave,
                    pieces,
                    self.scheme,
                    edge_limit=limit,
                    guard=guard,
                    observe=observe and _from_row(index * self.rows, observe),
                    phases=phases,
                    sparing=True,
                    axes=axes,
                )
                count = sum(piece.steps for piece in pieces)
                spent += count * self.scheme.transforms_per_step
                if outcome.kind == "aliased" and 2 * leg.samples <= self.widest:
                    leg = Leg(2 * leg.samples, leg.steps)
                elif outcome.kind == "steps_too_long" and leg.steps < STEP_LIMIT:
                    leg = Leg(leg.samples, max(leg.steps + leg.steps // 2, self.legs))
                    fewest = leg.steps
                else:
                    break
                wave = kept.again(kept.field.shape[2])
            if outcome.kind != "completed":
                break
            done.append(leg)
            steps += count
        wave.settle()
        return Trip(wave.field.copy(), tuple(done), steps, spent, outcome)


def _from_row(first: int, observe: Observer) -> Observer:
    """An observer of rows counted from 1, for one of rows of the line counted from 0."""
    return lambda row, field: observe(first + row - 1, field)


def _noise(seed: int, realizations: range, grid: Grid, boosted: bool, complex_type: type) -> Field:
    drawn = [draw(seed, realizations, grid, what) for what in (SOURCE, BOOSTER)[: 1 + boosted]]
    noise: Field = np.concatenate(drawn, axis=1).astype(complex_type)
    noise.flags.writeable = False
    return noise


_kept_noise = lru_cache(maxsize=4)(_noise)
