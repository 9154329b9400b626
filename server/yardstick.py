"""The solver on one core: against a plain script and its bare transforms, and as it grows.

Times are processor time of this process, which the rest of the machine disturbs least.
"""

import importlib.util
import math
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from statistics import median
from types import ModuleType
from typing import Any, TypeVar

import numpy as np

from solver.chain import Chain
from solver.ensemble import Bench, pilot, run_round
from solver.experiment import Experiment, Precision, Study, with_changes
from solver.grid import Field
from solver.passage import Passage
from solver.propagation import Propagation, propagate, relative_error
from solver.schemes import SECOND_ORDER
from solver.statistics import Blocks, central, last_central
from solver.study import StudyState, execute
from solver.task import CHUNK, PILOTED, RoundTask, Schedule, Task
from solver.track import Wave
from solver.transforms import MOST_TOGETHER, batch_size, batches, resampled, transforms

COMPARED = 96
"""Realizations of each point from which the worth of the control variate is told."""
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


def plain_fibre(plain: ModuleType, experiment: Experiment) -> Any:
    (span,) = experiment.line
    return plain.Fibre(
        span.length_km,
        span.beta2(experiment.source.wavelength_nm),
        span.loss_db_per_km,
        span.gamma_per_w_km,
        *span.kerr_coefficients(),
    )


def computed(study: Study) -> StudyState:
    """A whole study carried out in this process, as a server does it."""
    state = StudyState(study)
    waiting: list[Task] = state.ready()
    while waiting:
        task = waiting.pop(0)
        waiting += state.absorb(task, execute(task))
    return state


@dataclass(frozen=True)
class PlainStudy:
    """What the plain script takes for a study.

    cpu_s: processor time for the study's standard errors, in realizations, on the grid that the
    study was given; narrow_cpu_s: the same on the widest grid that the study took at each point;
    equal_cpu_s: on the study's grid, with as many realizations as the study took,
    study_realizations. All over all points.
    """

    cpu_s: float
    narrow_cpu_s: float
    realizations: int
    equal_cpu_s: float
    study_realizations: int
    fewest_steps: int
    most_steps: int


def _script(plain: ModuleType, fields: Field, time_step_ps: float, fibre: Any, steps: int) -> float:
    seen = [plain.moments(plain.propagate(field, time_step_ps, fibre, steps)) for field in fields]
    return float(plain.central_correlation(seen))


def _more_realizations(chain: Chain) -> float:
    """How many times the study's realizations its standard error takes without a control.

    Told from more realizations than a point has: the ratio of two errors needs them.
    """
    findings = chain.findings
    assert findings is not None
    task = RoundTask(
        "ratio", 0, 0, 0, chain.experiment, first=0, count=COMPARED, schedule=findings.schedule
    )
    blocks = Blocks(chain.layout.block_features)
    blocks.add(run_round(task).blocks)
    last = slice(5 * (chain.layout.distances - 1), 5 * chain.layout.distances)
    alone = blocks.estimate(lambda means: central(means[..., last])[..., None])
    mended = last_central(chain.layout, blocks, findings.linear.launched)
    return float(alone.standard_error[0] / mended.standard_error[0]) ** 2


def plain_study(plain: ModuleType, state: StudyState, timed_realizations: int) -> PlainStudy:
    """Time the plain script on some realizations of each point, scaled to those it needs.

    It knows nothing of narrower grids for weaker light, but is timed on them too, and it is given
    a finer time step where the light needs one; the search for its steps is not charged. The
    script averages what it sees, so it needs more realizations for the same standard error.
    """
    chains = [chain for chain in state.chains.values() if chain.findings]
    cpu_s = narrow_cpu_s = equal_cpu_s = 0.0
    needed = 0
    chosen = []
    for chain in chains:
        assert chain.findings is not None
        narrow = max(leg.samples for leg in chain.findings.schedule)
        given = max(narrow, chain.ensemble.samples)
        passage, fibre = Passage(chain.experiment, 1), plain_fibre(plain, chain.experiment)
        launched = passage.fields(range(timed_realizations))
        taken_s: dict[int, float] = {}
        for samples in sorted({narrow, given}, reverse=True):
            fields, step_ps = resampled(launched, samples), passage.grid(samples).time_step_ps
            if samples == given:
                steps, _ = plain.steps_for(fields[0], step_ps, fibre, PLAIN_ERROR)
                chosen.append(steps)
            _, all_s = timed(_script, plain, fields, step_ps, fibre, steps)
            taken_s[samples] = all_s / timed_realizations
        more = math.ceil(chain.realizations * _more_realizations(chain))
        needed += more
        cpu_s += taken_s[given] * more
        narrow_cpu_s += taken_s[narrow] * more
        equal_cpu_s += taken_s[given] * chain.realizations
    realizations = state.progress().realizations
    return PlainStudy(
        cpu_s, narrow_cpu_s, needed, equal_cpu_s, realizations, min(chosen), max(chosen)
    )


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
    experiment = at_power(power_mw, precision=precision)
    passage = Passage(experiment, 1)
    samples = passage.start_samples
    while samples <= 2 * passage.widest:
        fields = resampled(passage.fields(range(realizations)), samples)
        line = Line(experiment, fields, passage.grid(samples).time_step_ps)
        if line.propagate(tolerance, precision).outcome.kind == "completed":
            return line
        samples *= 2
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
    field, fibre = line.fields[0], plain_fibre(plain, line.experiment)
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
    line = resolved_line(power_mw, MOST_TOGETHER, tolerance, precision)
    samples = line.fields.shape[2]
    realizations = batch_size(samples)
    line = Line(line.experiment, line.fields[:realizations], line.time_step_ps)
    out = line.propagate(tolerance, precision)
    ratios = []
    for _ in range(REPEATS):
        _, whole_s = timed(line.propagate, tolerance, precision)
        ratios.append(whole_s / _bare_s(realizations, samples, precision, out.transforms))
    return median(ratios), out.transforms


@dataclass(frozen=True)
class Later:
    """A task of a study after its first, ready to be timed: its schedule is known."""

    task: RoundTask
    schedule: Schedule
    passage: Passage

    def _bare_s(self) -> float:
        precision, total_s = self.passage.precision, 0.0
        for batch in self.batches():
            for index, leg in enumerate(self.schedule):
                steps = sum(piece.steps for piece in self.passage.pieces(leg)[index])
                count = steps * self.passage.scheme.transforms_per_step
                total_s += _bare_s(len(batch), leg.samples, precision, count)
        return total_s

    def batches(self) -> list[range]:
        """Realizations that go together."""
        task = self.task
        rows = range(task.first, task.first + task.count)
        return list(batches(rows, max(leg.samples for leg in self.schedule)))

    def over_transforms(self) -> tuple[float, float]:
        """Times over those of the transforms: of the fields' way alone, and of the whole task."""
        alone, whole = [], []
        launched = [self.passage.fields(batch) for batch in self.batches()]

        def travel() -> None:
            for fields in launched:
                self.passage.travel(fields, self.schedule)

        travel()  # makes the operators
        for _ in range(REPEATS):
            bare_s = self._bare_s()
            alone.append(timed(travel)[1] / bare_s)
            whole.append(timed(run_round, self.task)[1] / bare_s)
        return median(alone), median(whole)


def later_task(power_mw: float) -> Later:
    """A chunk of realizations of the headline study at one power."""
    experiment = at_power(power_mw)
    first = RoundTask("first", 0, 0, 0, experiment, 0, CHUNK, schedule=None)
    found = run_round(first).findings
    if found is None:
        raise RuntimeError(f"no schedule was found at {power_mw:g} mW")
    task = RoundTask("later", 0, 0, 0, experiment, CHUNK, CHUNK, schedule=found.schedule)
    run_round(task)  # loads what only the first task of a process has to
    return Later(task, found.schedule, Passage(experiment, experiment.ensemble.distances))


def step_s(samples: int, steps: int) -> float:
    """Processor time of one second-order step of one realization of this many samples, s."""
    passage = Passage(at_power(200.0, samples=samples, window_ps=2.0 * samples), 1)
    fields = resampled(passage.fields(range(batch_size(samples))), samples)
    track = passage.track(samples)
    pieces = track.pieces(np.ones(1), steps)

    def march() -> None:
        track.march(Wave(fields), pieces, SECOND_ORDER, edge_limit=1.0)

    march()
    return min(timed(march)[1] for _ in range(3)) / steps / len(fields)


_UNPLANNED = """
import sys
sys.modules["pyfftw"] = None
from server import yardstick
print(yardstick.found_steps({power_mw}, {length_km}).realization_s)
"""


def unplanned_s(power_mw: float, length_km: float) -> float:
    """What :func:`found_steps` times, s, in a process that has no pyFFTW."""
    script = _UNPLANNED.format(power_mw=power_mw, length_km=length_km)
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    return float(done.stdout)


@dataclass(frozen=True)
class Found:
    """What an ensemble takes: steps, samples at both ends of the line, processor time in s."""

    steps: int
    first_samples: int
    last_samples: int
    realization_s: float


def found_steps(power_mw: float, length_km: float) -> Found:
    """What the headline fibre takes of steps, samples and time at one power and length."""
    experiment = with_changes(at_power(power_mw), {"line.*.length_km": length_km})
    bench = Bench(experiment)
    launched = bench.passage.fields(range(PILOTED))
    found = pilot(bench, launched, range(PILOTED))
    if found.outcome.kind != "completed":
        raise RuntimeError(found.outcome.advice)
    schedule = found.schedule
    bench.passage.travel(launched, schedule)  # makes the operators
    taken_s = min(timed(bench.passage.travel, launched, schedule)[1] for _ in range(3))
    return Found(
        bench.passage.steps(schedule), schedule[0].samples, schedule[-1].samples, taken_s / PILOTED
    )
