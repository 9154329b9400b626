"""Schedules: what the pilot's rule keeps, and how a passage helps itself on the way."""

import numpy as np
import pytest

from solver.ensemble import Bench, pilot
from solver.experiment import Experiment, Precision, Span, Study, with_changes
from solver.fibre import sections
from solver.grid import Grid, Real
from solver.kernels import intensity_moments
from solver.propagation import light_of
from solver.schemes import SECOND_ORDER
from solver.statistics import Blocks, central
from solver.task import PILOTED, Leg, Schedule
from solver.track import Track, Wave, edge_share
from solver.transforms import batches, resampled
from tests import reference

REALIZATIONS = 24
FINE_SAMPLES = 8192
FINER = 5
"""Steps of the reference, as a multiple of those of the schedule that is held against it."""


def _headline(power_mw: float, variant: int) -> Experiment:
    """The headline study's variant at a power."""
    study = Study()
    changes = dict(study.variants[variant].changes)
    return with_changes(study.experiment, {**changes, "launch.total_power_mw": power_mw})


def _on(schedule: Schedule, bench: Bench) -> Real:
    """Moments at the end of the line, on a schedule, as a worker's later rounds are computed."""
    launched = bench.passage.fields(range(REALIZATIONS))
    found = []
    for batch in batches(range(REALIZATIONS), max(leg.samples for leg in schedule)):
        seen = bench.follow(launched[batch.start : batch.stop], batch, schedule)
        assert seen.trip.outcome.kind == "completed"
        found.append(seen.moments[0][:, -1])
    return np.concatenate(found)


def _finely(bench: Bench, steps: int) -> Real:
    """The same, on a grid and in steps that are finer all along than any schedule's."""
    passage = bench.passage.watched(1)
    launched = passage.fields(range(REALIZATIONS))
    found = []
    for batch in batches(range(REALIZATIONS), FINE_SAMPLES):
        field = resampled(launched[batch.start : batch.stop], FINE_SAMPLES)
        trip = passage.travel(field, (Leg(FINE_SAMPLES, steps),), checked=False)
        assert trip.outcome.kind == "completed"
        assert edge_share(np.fft.fft(trip.field), FINE_SAMPLES // 2) < 1e-6
        found.append(intensity_moments(trip.field))
    return np.concatenate(found)


@pytest.mark.parametrize("variant", [0, 2])
@pytest.mark.parametrize("power_mw", [100.0, 316.0, 650.0])
def test_the_bias_stays_under_a_tenth_of_the_standard_error(power_mw: float, variant: int) -> None:
    """The rule of the pilot, on realizations it has not seen and at the error aimed at.

    Both ways see the same light, so their difference has a small error of its own; to be sure
    the bias is no larger than allowed, it may not exceed it by two of these.
    """
    experiment = _headline(power_mw, variant)
    bench = Bench(experiment)
    found = pilot(bench, bench.passage.fields(range(PILOTED)), range(PILOTED))
    assert found.outcome.kind == "completed"
    steps = bench.passage.steps(found.schedule)
    moments, fine = _on(found.schedule, bench), _finely(bench, FINER * steps)
    paired = Blocks(10)
    paired.add(np.concatenate([moments, fine], axis=1))
    off, error = paired.estimate(lambda m: (central(m[..., :5]) - central(m[..., 5:]))[..., None])
    allowed = experiment.ensemble.standard_error_target / 10
    assert bench.passage.bias_allowed == pytest.approx(allowed)
    assert abs(off[0]) <= allowed + 2.0 * error[0]
    # Worth asserting only because the bar itself is short against what is allowed.
    assert error[0] < allowed
    assert found.biases[0] <= allowed


@pytest.mark.parametrize(("precision", "difference"), [("single", 1e-4), ("double", 1e-6)])
def test_widening_on_the_way_is_as_good_as_a_wide_grid(
    precision: Precision, difference: float
) -> None:
    """Light that doubles its grid twice comes to the fields of one that had it from the start.

    With an edge kept as empty as single precision can tell, to that precision; in fewer samples.
    """
    changes: dict[str, object] = {"ensemble.precision": precision}
    passage = Bench(with_changes(_headline(650.0, 0), changes)).passage  # type: ignore[arg-type]
    passage.edge_limit = 1e-9
    launched, steps = passage.fields(range(2)), 400
    start = launched.shape[2]
    watched = []
    trip = passage.travel(
        launched,
        passage.evenly(start, steps),
        observe=lambda leg, field: watched.append((leg, field.shape[2])),
    )
    assert trip.outcome.kind == "completed"
    samples = [leg.samples for leg in trip.schedule]
    assert watched == list(enumerate(samples))
    assert samples == sorted(samples)
    assert start < samples[0] < samples[-1]
    assert {leg.steps for leg in trip.schedule} == {steps}
    assert trip.steps == passage.steps(trip.schedule)
    # What a leg cost before it was gone over again is not forgotten.
    assert trip.transforms > trip.steps * passage.scheme.transforms_per_step
    wide = samples[-1]
    whole = passage.travel(resampled(launched, wide), passage.evenly(wide, steps), checked=False)
    assert reference.relative_l2(resampled(trip.field, wide), whole.field) < difference


def test_a_schedule_is_kept_or_made_finer() -> None:
    """The pilot's light goes through it unchanged; other light takes no less on any leg."""
    bench = Bench(_headline(316.0, 0))
    found = pilot(bench, bench.passage.fields(range(PILOTED)), range(PILOTED))
    own = bench.passage.travel(bench.passage.fields(range(PILOTED)), found.schedule)
    assert own.schedule == found.schedule
    assert own.transforms == own.steps * bench.passage.scheme.transforms_per_step
    for first in (40, 44, 48):
        trip = bench.passage.travel(bench.passage.fields(range(first, first + 4)), found.schedule)
        assert trip.outcome.kind == "completed"
        for taken, planned in zip(trip.schedule, found.schedule, strict=True):
            assert taken.samples >= planned.samples
            assert taken.steps >= planned.steps


def test_the_grid_starts_as_narrow_as_the_launch_allows() -> None:
    """Below what was asked for, clear of its own edges, and of half as many samples it is not."""
    passage = Bench(_headline(100.0, 0)).passage
    start = passage.start_samples
    assert 1024 <= start < passage.experiment.ensemble.samples
    spectrum = np.fft.fft(passage.fields(range(8)))
    assert edge_share(spectrum, start // 2) < passage.edge_limit
    wide = with_changes(_headline(100.0, 0), {"source.width_ghz": 120.0})
    assert Bench(wide).passage.start_samples > start


def test_steps_too_few_for_the_band_grow_on_the_way() -> None:
    """Where the splitting itself ends the band within the light, shorter steps are taken."""
    passage = Bench(_headline(316.0, 0)).passage.watched(2)
    launched = passage.fields(range(2))
    schedule = (Leg(4096, 4),) * 2
    kept = passage.travel(launched, schedule, checked=False)
    assert kept.schedule == schedule
    trip = passage.travel(launched, schedule)
    assert trip.outcome.kind == "completed"
    assert 4 < trip.schedule[0].steps <= trip.schedule[1].steps


LIT = Span(length_km=1.0, beta2_ps2_per_km=18.5, gamma_per_w_km=2.3)


def _march(field: np.ndarray, power_w: float, step_km: float, steps: int, guard: float) -> str:
    """Outcome of Manakov light of this mean power in steps of this length, on 2 ps."""
    grid = Grid(field.shape[2], 2.0)
    span = LIT.model_copy(update={"length_km": step_km * steps})
    track = Track(sections([span], grid, 1550.0, 0), grid)
    lit = np.sqrt(power_w) * field
    pieces = track.pieces(track.weights(SECOND_ORDER, light_of(lit)), steps)
    assert sum(piece.steps for piece in pieces) == steps
    return track.march(Wave(lit), pieces, SECOND_ORDER, edge_limit=1e-4, guard=guard).kind


@pytest.mark.parametrize(("power_w", "phase"), [(1.0, 0.9), (2.0, 0.8), (3.0, 0.7), (4.0, 0.7)])
def test_sidebands_driven_by_the_steps_ask_for_shorter_ones(power_w: float, phase: float) -> None:
    """A steady wave in normal dispersion is stable: what grows at the end of the grid is not real.

    phase: of the linear flow at the end of the grid in one step, in units of π. The Kerr phase
    makes up for what it lacks (Weideman and Herbst, SIAM J. Numer. Anal. 23, 485, 1986).
    """
    noise = np.random.default_rng(3).standard_normal((2, 2, 2, 512))
    field = 1e-3 * (noise[0] + 1j * noise[1])
    field[:, 0] += 1.0
    step_km = phase * np.pi / (18.5 / 2 * (np.pi / 2.0) ** 2)
    assert _march(field, power_w, step_km, 20, 1.0) == "steps_too_long"
    assert _march(field, power_w, step_km, 20, 0.0) == "aliased"
    assert _march(field, power_w, step_km / 2, 40, 1.0) == "completed"


def test_light_that_really_broadens_asks_for_samples() -> None:
    """However short the steps are."""
    field = reference.stirred_light(3, 2, 512, 2.0, 0.04, 0.5)
    step_km = 0.4 * np.pi / (18.5 / 2 * (np.pi / 2.0) ** 2)
    for finer in (1, 2, 4):
        assert _march(field, 2.0, step_km / finer, 60 * finer, 1.0) == "aliased"
