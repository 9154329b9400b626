"""The solver on one core: against a plain script, against its bare transforms, as it grows.

Times are processor time of this process, which the rest of the machine disturbs least.
"""

import importlib.util
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from statistics import median
from types import ModuleType
from typing import Any, TypeVar

import numpy as np

from solver.ensemble import CHECKED, Bench, pilot, run_round
from solver.experiment import Experiment, Precision, Study, with_changes
from solver.grid import Field
from solver.propagation import Propagation, propagate, relative_error
from solver.result import StudyResult
from solver.schemes import Scheme
from solver.study import realizations_per_task
from solver.task import RoundTask
from solver.track import Light, Track
from solver.transforms import batch_size, transforms

PLAIN_ERROR = 1e-3
"""Field error to which the plain script computes a study."""
REPEATS = 5
_PATH = Path(__file__).parents[1] / "tests" / "benchmarks" / "plain.py"


def plain_script() -> ModuleType | None:
    """The script a lab would write by hand; None where the source tree is not there."""
    if not _PATH.is_file():
        return None
    found = importlib.util.spec_from_file_location("plain", _PATH)
    assert found is not None
    assert found.loader is not None
    module = importlib.util.module_from_spec(found)
    found.loader.exec_module(module)
    return module


T = TypeVar("T")


def timed(work: Callable[..., T], *given: Any) -> tuple[T, float]:
    """What one call comes to, and its processor time in s."""
    start_s = time.process_time()
    made = work(*given)
    return made, time.process_time() - start_s


def _plain_fibre(plain: ModuleType, experiment: Experiment) -> Any:
    (span,) = experiment.line
    return plain.Fibre(
        span.length_km,
        span.beta2(experiment.source.wavelength_nm),
        span.loss_db_per_km,
        span.gamma_per_w_km,
        *span.kerr_coefficients(),
    )


@dataclass(frozen=True)
class PlainStudy:
    """What the plain script takes for a study: processor time in s, and steps of its points."""

    cpu_s: float
    fewest_steps: int
    most_steps: int


def _script(plain: ModuleType, fields: Field, time_step_ps: float, fibre: Any, steps: int) -> float:
    seen = [plain.moments(plain.propagate(field, time_step_ps, fibre, steps)) for field in fields]
    return float(plain.central_correlation(seen))


def plain_study(plain: ModuleType, result: StudyResult, realizations: int) -> PlainStudy:
    """Time the plain script on some realizations of each point, scaled to all of them.

    It is given the study's light, and the time step that the study chose for each point; the
    search for its steps is not charged.
    """
    total_s = 0.0
    chosen = []
    for found in (point for curve in result.points for point in curve if point is not None):
        experiment = result.study.experiment_at(found.variant, found.point)
        bench = Bench(experiment, found.refinement, ())
        fields, fibre = bench.fields(range(realizations)), _plain_fibre(plain, experiment)
        step_ps = bench.grid.time_step_ps
        steps, _ = plain.steps_for(fields[0], step_ps, fibre, PLAIN_ERROR)

        _, taken_s = timed(_script, plain, fields, step_ps, fibre, steps)
        total_s += taken_s / realizations * found.realizations
        chosen.append(steps)
    return PlainStudy(total_s, min(chosen), max(chosen))


def at_power(power_mw: float, **ensemble: Any) -> Experiment:
    """The headline experiment at one power, parts of its ensemble changed."""
    changes = {f"ensemble.{name}": value for name, value in ensemble.items()}
    return with_changes(Study().experiment, {"launch.total_power_mw": power_mw, **changes})


@dataclass(frozen=True)
class Line:
    """Launched fields and the line they go down, on a grid that holds them."""

    experiment: Experiment
    fields: Field
    time_step_ps: float

    def propagate(self, tolerance: float, precision: Precision) -> Propagation:
        """The public propagation."""
        return propagate(
            self.fields,
            time_step_ps=self.time_step_ps,
            line=self.experiment.line,
            tolerance=tolerance,
            precision=precision,
            wavelength_nm=self.experiment.source.wavelength_nm,
        )


def resolved_line(
    power_mw: float, realizations: int, tolerance: float, precision: Precision
) -> Line:
    """A line whose window has as many samples as the tolerance needs."""
    for refinement in (1, 2, 4, 8):
        experiment = at_power(power_mw, precision=precision)
        bench = Bench(experiment, refinement, ())
        line = Line(experiment, bench.fields(range(realizations)), bench.grid.time_step_ps)
        if line.propagate(tolerance, precision).outcome.kind == "completed":
            return line
    raise RuntimeError(f"no grid holds {power_mw:g} mW to {tolerance:g}")


@dataclass(frozen=True)
class Single:
    """One propagation both ways: processor times in s, errors, and how far apart they end."""

    samples: int
    solver_s: float
    plain_s: float
    error: float
    plain_error: float
    plain_steps: int
    apart: float


def single_propagation(plain: ModuleType, power_mw: float, tolerance: float) -> Single:
    """One field, double precision; the solver's trial runs are charged, the script's not."""
    line = resolved_line(power_mw, 1, tolerance, "double")
    field, fibre = line.fields[0], _plain_fibre(plain, line.experiment)
    out = line.propagate(tolerance, "double")
    # The error falls with the square of the step: an easier tolerance tells where to look.
    rough, _ = plain.steps_for(field, line.time_step_ps, fibre, 1e3 * tolerance)
    first = int(rough * np.sqrt(1e3) * 0.98)
    steps, error = plain.steps_for(field, line.time_step_ps, fibre, tolerance, first)
    ended, plain_s = timed(plain.propagate, field, line.time_step_ps, fibre, steps)
    solver_s = median(timed(line.propagate, tolerance, "double")[1] for _ in range(REPEATS))
    apart = relative_error(ended[None], out.field)
    return Single(field.shape[1], solver_s, plain_s, out.error, error, steps, apart)


def _bare_s(realizations: int, samples: int, precision: Precision, count: int) -> float:
    """Processor time of so many transforms of a batch and nothing else, s."""
    work = transforms(realizations, samples, precision)
    work.buffer[:] = 0.0  # repeated unscaled transforms of anything else would overflow

    def both_ways() -> None:
        for _ in range(count // 2):
            work.forward()
            work.inverse()

    return timed(both_ways)[1]


def over_transforms(power_mw: float, tolerance: float, precision: Precision) -> tuple[float, int]:
    """Time of a whole propagation of a full batch over that of its transforms; their number."""
    realizations = batch_size(at_power(power_mw).ensemble.samples)
    line = resolved_line(power_mw, realizations, tolerance, precision)
    samples = line.fields.shape[2]
    realizations = batch_size(samples)
    line = Line(line.experiment, line.fields[:realizations], line.time_step_ps)
    out = line.propagate(tolerance, precision)
    ratios = []
    for _ in range(REPEATS):
        _, whole_s = timed(line.propagate, tolerance, precision)
        ratios.append(whole_s / _bare_s(realizations, samples, precision, out.transforms))
    return median(ratios), out.transforms


def round_over_transforms(power_mw: float) -> float:
    """Time of a later task of a study, draws and estimators included, over its transforms."""
    experiment = at_power(power_mw)
    samples = experiment.ensemble.samples
    count = realizations_per_task(samples)
    first = RoundTask("first", 0, 0, 0, experiment, 0, count, refinement=1, steps=None)
    found = run_round(first).findings
    if found is None:
        raise RuntimeError(f"the steps at {power_mw:g} mW were not found on the coarsest grid")
    task = RoundTask("later", 0, 0, 0, experiment, count, count, refinement=1, steps=found.steps)
    batches = -(-count // batch_size(samples))
    bare = run_round(task).transforms * batches
    ratios = []
    for _ in range(REPEATS):
        _, whole_s = timed(run_round, task)
        ratios.append(whole_s / _bare_s(batch_size(samples), samples, "single", bare))
    return median(ratios)


@dataclass(frozen=True)
class Rung:
    """One run with a fixed number of steps: batch transforms, processor time in s, error."""

    transforms: int
    cpu_s: float
    error: float


class Ladder:
    """Runs of one field down one line with ever more steps, held against a very fine one."""

    def __init__(self, power_mw: float, refinement: int, finest: Scheme, finest_steps: int):
        self._bench = Bench(at_power(power_mw, precision="double"), refinement, ())
        self._fields = self._bench.fields(range(1))
        self._light: Light = self._bench.light
        self._uniform = self._track(())
        self.truth, _ = self._march(self._uniform, finest, "double", finest_steps)

    def _track(self, recorded_km: Sequence[float]) -> Track:
        experiment = self._bench.experiment
        return Track(
            experiment.line,
            self._bench.grid,
            wavelength_nm=experiment.source.wavelength_nm,
            recorded_km=recorded_km,
        )

    def _march(
        self, track: Track, scheme: Scheme, precision: Precision, steps: float
    ) -> tuple[Field, int]:
        work = transforms(1, self._bench.grid.samples, precision)
        pieces = track.pieces(scheme, self._light, steps)
        work.buffer[:] = self._fields
        outcome = track.march(work, pieces, scheme, precision, edge_limit=1.0)
        if outcome.kind != "completed":
            raise RuntimeError(outcome.advice)
        taken = sum(piece.steps for piece in pieces)
        return work.buffer.copy(), taken * scheme.transforms_per_step

    def rungs(
        self, scheme: Scheme, precision: Precision, steps: Sequence[int], parts: int = 1
    ) -> list[Rung]:
        """Runs with these numbers of steps, shared over equal parts of the line."""
        length = self._bench.experiment.length_km
        track = self._track([length * (i + 1) / parts for i in range(parts)])
        made = []
        for count in steps:
            self._march(track, scheme, precision, count)  # makes the operators
            runs = [timed(self._march, track, scheme, precision, count) for _ in range(3)]
            (field, spent), _ = runs[-1]
            taken_s = min(taken_s for _, taken_s in runs)
            made.append(Rung(spent, taken_s, relative_error(field, self.truth)))
        return made

    def plain_rungs(self, plain: ModuleType, steps: Sequence[int]) -> list[Rung]:
        """The same of the plain script."""
        fibre, step_ps = _plain_fibre(plain, self._bench.experiment), self._bench.grid.time_step_ps
        made = []
        for count in steps:
            field, taken_s = timed(plain.propagate, self._fields[0], step_ps, fibre, count)
            made.append(Rung(2 * count + 2, taken_s, relative_error(field[None], self.truth)))
        return made


def transforms_at(error: float, rungs: Sequence[Rung]) -> float:
    """Transforms for an error, between the runs that enclose it on logarithmic axes.

    Infinite where the runs do not reach it.
    """
    falling = sorted(rungs, key=lambda rung: rung.error)
    errors = np.log([rung.error for rung in falling])
    if not errors[0] <= np.log(error) <= errors[-1]:
        return float("inf")
    counts = np.log([rung.transforms for rung in falling])
    return float(np.exp(np.interp(np.log(error), errors, counts)))


def step_s(samples: int, steps: int) -> float:
    """Processor time of one second-order step of one realization of this many samples, s."""
    window_ps = 2.0 * samples
    experiment = at_power(200.0, samples=samples, window_ps=window_ps)
    bench = Bench(experiment, 1, ())
    fields = bench.fields(range(batch_size(samples)))
    pieces = bench.pieces(steps)
    taken = sum(piece.steps for piece in pieces)
    work = bench.work(len(fields))

    def march() -> None:
        work.buffer[:] = fields
        bench.track.march(work, pieces, bench.scheme, bench.precision, edge_limit=1.0)

    march()
    return min(timed(march)[1] for _ in range(3)) / taken / len(fields)


def steps_found(power_mw: float, length_km: float) -> tuple[int, float]:
    """Steps that an ensemble takes down the headline fibre, and its time step in ps."""
    experiment = with_changes(at_power(power_mw, distances=1), {"line.*.length_km": length_km})
    for refinement in (1, 2, 4):
        bench = Bench(experiment, refinement, [length_km])
        found = pilot(bench, bench.fields(range(CHECKED)), fewest=1)
        if found.outcome.kind == "completed":
            return found.steps, bench.grid.time_step_ps
    raise RuntimeError(f"no grid holds {power_mw:g} mW over {length_km:g} km")
