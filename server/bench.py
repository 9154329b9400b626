"""``crossdip bench``: what this machine does, measured in one run on servers of its own.

Every row is what was measured, the figure, and the goal it is held against. Figures of speed
mean something only beside others of the same run on the same machine.
"""

import argparse
import math
import os
import platform
import secrets
import time
from pathlib import Path
from typing import Any

import psutil

from server.measuring import Served, Timing, served
from server.settings import usable_cores
from solver.experiment import Precision, Study

TIMED_REALIZATIONS = 2
"""Realizations of each point on which the plain script is timed."""
MIDDLE_MW, HIGH_MW = 200.0, 500.0
LENGTH_KM = 8.0
FINE = 1e-6
LADDERS = ((50.0, 4096, 2), (200.0, 8192, 8), (800.0, 8192, 64))
"""Power in mW, samples, and fewest steps of the second order to try."""


def _row(what: str, figure: str, goal: str = "") -> None:
    print(f"{what:<72} {figure:>12}  {goal}".rstrip(), flush=True)


def _note(words: str) -> None:
    print(f"  {words}", flush=True)


def _load() -> str:
    return ", ".join(f"{x:.1f}" for x in psutil.getloadavg())


def _headline_study(seed: int) -> dict[str, Any]:
    study = Study().model_dump(mode="json")
    study["experiment"]["ensemble"]["seed"] = seed
    return study


def _growth_study(realizations: int) -> dict[str, Any]:
    study = _headline_study(secrets.randbelow(2**50))
    study["experiment"]["ensemble"].update(
        samples=1024,
        window_ps=4096.0,
        standard_error_target=1e-5,
        min_realizations=realizations,
        max_realizations=realizations,
    )
    study["sweep"].update(start=50.0, stop=200.0, points=2)
    study["variants"] = study["variants"][:1]
    return study


def _headline(server: Served, workers: int, seed: int) -> Timing:
    timing = server.time(_headline_study(seed))
    busy = timing.cpu_s / timing.end_s / workers
    _row("headline study, POST to the end of its stream", f"{timing.end_s:.2f} s", "3 s")
    _row("  to the first map row", f"{timing.first_s['map']:.2f} s", "0.5 s")
    _row("  to the first curve point", f"{timing.first_s['point']:.2f} s", "0.5 s")
    _row("  points", f"{timing.points}")
    _row("  core use, processes of the server over cores given", f"{100 * busy:.0f} %", "90 %")
    own, workers_s = timing.server_cpu_s, timing.cpu_s - timing.server_cpu_s
    _row(
        "  processor time of the server itself, of all its workers", f"{own:.1f}, {workers_s:.1f} s"
    )
    return timing


def _memory(server: Served) -> None:
    megabytes = {name: size / 2**20 for name, size in server.watch.peak_bytes.items()}
    _row("  peak memory of the server", f"{megabytes['server']:.0f} MB")
    _row("  peak memory of the largest worker", f"{megabytes['workers']:.0f} MB")


def _against_plain_study(study: Study, timing: Timing) -> None:
    from server import yardstick

    plain = yardstick.plain_script()
    if plain is None:
        _note("tests/benchmarks/plain.py is not here: run from the source tree to compare with it")
        return
    state, here_s = yardstick.timed(yardstick.computed, study)
    script = yardstick.plain_study(plain, state, TIMED_REALIZATIONS)
    worst = max(
        point.discretization_error
        for curve in state.result().points
        for point in curve
        if point is not None
    )
    _row("the same study in one process, without a server", f"{here_s:.1f} s")
    _row("plain script, equal standard errors", f"{script.cpu_s:.1f} s")
    _row("plain script, given each point's narrow grid", f"{script.narrow_cpu_s:.1f} s")
    _row("plain script, equal realizations", f"{script.equal_cpu_s:.1f} s")
    _note(
        f"timed on {TIMED_REALIZATIONS} realizations of each point, on the grid that the study "
        "was given, and scaled to the"
    )
    _note(
        f"{script.realizations} that plain averages need for the study's standard errors; the "
        f"study took {script.study_realizations}, with what"
    )
    _note(
        f"is known of the launch. Field error {yardstick.PLAIN_ERROR:g} in {script.fewest_steps} "
        f"to {script.most_steps} steps, search not charged"
    )
    for words, cpu_s, goal in (
        ("", script.cpu_s, "25 ×, aim 50"),
        (", narrow grids", script.narrow_cpu_s, ""),
        (", equal realizations", script.equal_cpu_s, ""),
    ):
        ratio = f"{cpu_s / timing.end_s:.1f} ×"
        _row(f"headline study against the plain script, wall time{words}", ratio, goal)
    ratio = f"{script.cpu_s / timing.cpu_s:.1f} ×"
    _row("  processor time, all of the server's against the script's", ratio)
    _row("  largest discretization error on C12(0)", f"{worst:.1e}", "1e-3")


def _one_core() -> None:
    from server import yardstick
    from solver.transforms import PLANNED, UNPLANNED_COST

    plain = yardstick.plain_script()
    if plain is not None:
        one = yardstick.single_propagation(plain, MIDDLE_MW, FINE)
        what = f"one field at {FINE:g}, double, {MIDDLE_MW:g} mW, against the plain script"
        _row(what, f"{one.plain_s / one.solver_s:.1f} ×", "8 ×, aim 15")
        _note(
            f"{one.samples} samples: {one.solver_s:.3f} s, trial runs included, against "
            f"{one.plain_s:.3f} s in {one.plain_steps} steps, search not charged;"
        )
        _note(
            f"errors {one.error:.1e} and {one.plain_error:.1e}, the two fields {one.apart:.1e} "
            "apart"
        )
    asked: list[tuple[float, Precision]] = [(FINE, "double"), (1e-3, "single")]
    for tolerance, precision in asked:
        ratio, count = yardstick.over_transforms(MIDDLE_MW, tolerance, precision)
        what = f"propagation over its {count} bare transforms, {precision}, {tolerance:g}"
        _row(what, f"{ratio:.2f}", "1.25, aim 1.15")
    for power_mw in (MIDDLE_MW, HIGH_MW):
        alone, whole = yardstick.later_task(power_mw).over_transforms()
        what = f"realizations of a study at {power_mw:g} mW, over their bare transforms"
        _row(what, f"{alone:.2f}", "1.25, aim 1.15")
        _row("  with draws, receiver and estimators", f"{whole:.2f}")
    if not PLANNED:
        _note(UNPLANNED_COST)
        return
    for power_mw in (MIDDLE_MW, HIGH_MW):
        planned_s = yardstick.found_steps(power_mw, LENGTH_KM).realization_s
        ratio = yardstick.unplanned_s(power_mw, LENGTH_KM) / planned_s
        what = f"whole propagation at {power_mw:g} mW with scipy.fft in place of pyFFTW"
        _row(what, f"{ratio:.1f} × as long")


def _work_and_precision(path: Path | None) -> None:
    """Schemes and a study's own steps against each other, at low, middle and high power."""
    from server import ladder
    from server.diagram import Row, drawn
    from server.yardstick import plain_script
    from solver.propagation import scheme_for
    from solver.schemes import SECOND_ORDER

    plain = plain_script()
    rows = []
    for power_mw, samples, first in LADDERS:
        case = ladder.case(plain, power_mw, samples, first)
        ours, at = case.study, f"at {power_mw:g} mW"
        best = min(
            ladder.work_at(ours.error, rungs, ladder.of_transforms)
            for rungs in (case.second, case.fourth)
        )
        # Whoever watches a distance ends a step there.
        best = max(best, SECOND_ORDER.transforms_per_step * Study().experiment.ensemble.distances)
        what = f"transforms of a study {at} over the best uniform steps', error {ours.error:.0e}"
        _row(what, f"{case.study_weighed / best:.2f}", "1")
        _note(
            f"weighed by their N log N, in those of its widest grid: {case.study_weighed:.0f} "
            f"against {best:.0f} that pass the same distances; counted alike, {ours.transforms}"
        )
        for error in (2e-2, FINE):
            fourth_s, second_s = (
                ladder.work_at(error, rungs, ladder.of_time) for rungs in (case.fourth, case.second)
            )
            what = f"time of the fourth order over that of the second {at}, error {error:g}"
            _row(what, f"{fourth_s / second_s:.2f}" if fourth_s < math.inf else "not reached")
        rows.append(
            Row(
                f"{power_mw:g} mW, one realization on {samples} samples; "
                f"fourth order takes less time below an error of {case.crossing():.0e}",
                {n: [(ladder.of_transforms(r), r.error) for r in c] for n, c in case.curves()},
                {n: [(1e3 * ladder.of_time(r), r.error) for r in c] for n, c in case.curves()},
            )
        )
    if path is None:
        return
    tolerances = [10 ** (-n / 20) for n in range(20, 160)]
    switch = min(tolerance for tolerance in tolerances if scheme_for(tolerance).order == 2)
    remarks = [
        f"Why the default is the default: the second order down to a field error of {switch:.0e} "
        "and the fourth below, because",
        "their times cross near there (over each row, where they did on this machine). Studies ask "
        "for about 0.01, and use single",
        "precision for its time: its rounding is where its curve turns up.",
    ]
    title = "Work and precision: the headline fibre, one core"
    path.write_text(drawn(title, rows, switch, remarks), encoding="utf-8")
    _row("work–precision diagram", str(path))


def _growth(workers: int, headline: Timing, seed: int, full: bool) -> None:
    from server import yardstick

    print("\nGrowth")
    exponents = [11, 13, 15, 17, *([19, 20] if full else [])]
    first: float | None = None
    for exponent in exponents:
        samples = 2**exponent
        taken_s = yardstick.step_s(samples, steps=16)
        per = taken_s / (samples * exponent)
        first = per if first is None else first
        _row(f"step of 2^{exponent} samples", f"{1e3 * taken_s:.3f} ms")
        _row("  per N log N, in that of the smallest", f"{per / first:.2f}", "1")
    for power_mw, length_km in (
        (50.0, 8.0),
        (200.0, 8.0),
        (800.0, 8.0),
        (200.0, 2.0),
        (200.0, 32.0),
    ):
        found = yardstick.found_steps(power_mw, length_km)
        grid = f"{found.first_samples} to {found.last_samples} samples"
        what = f"realization of a study, {power_mw:g} mW over {length_km:g} km"
        _row(f"{what}: {found.steps} steps, {grid}", f"{1e3 * found.realization_s:.2f} ms")
    counts = (2048, 100_000) if full else (256, 2048)
    with served(workers) as (server, _):
        times = []
        for count in counts:
            times.append(server.time(_growth_study(count)))
            server.watch.sample()
            _row(f"{count} realizations of each of 2 points", f"{times[-1].end_s:.2f} s")
            _memory(server)
    ratio = times[1].cpu_s / times[0].cpu_s / (counts[1] / counts[0])
    _row("  processor time per realization, in that of the fewest", f"{ratio:.2f}", "1")
    alone: Timing | None = None
    fewer = [2**n for n in range(workers.bit_length()) if 2**n < workers]
    for count in [*fewer, workers]:
        timing = headline
        if count < workers:
            with served(count) as (server, _):
                timing = server.time(_headline_study(seed))
        alone = alone or timing
        _row(f"headline study, workers: {count}", f"{timing.end_s:.2f} s")
        efficiency = alone.end_s / timing.end_s / count
        _row("  efficiency", f"{100 * efficiency:.0f} %", "85 % at 2" if count == 2 else "")
        more = timing.cpu_s / alone.cpu_s
        _row("  processor time, in that of one worker", f"{more:.2f}", "1")


def main(arguments: list[str]) -> int:
    """Measure and print; exit status."""
    parser = argparse.ArgumentParser(prog="crossdip bench", description=__doc__)
    parser.add_argument("--workers", type=int, default=usable_cores(), help="worker processes")
    parser.add_argument("--repeat", type=int, default=2, help="headline runs (2)")
    parser.add_argument("--full", action="store_true", help="grow to 2^20 samples and further")
    parser.add_argument("--diagram", type=Path, metavar="FILE.svg", help="draw work and precision")
    given = parser.parse_args(arguments)
    start_s = time.monotonic()
    print(f"{platform.machine()}, {os.cpu_count()} cores, Python {platform.python_version()}")
    print(f"{given.workers} workers; load average at the start {_load()}\n")
    with served(given.workers) as (server, ready_s):
        _row("crossdip serve typed, to workers warm", f"{ready_s:.2f} s", "4 s")
        timings = []
        for _ in range(given.repeat):
            seed = secrets.randbelow(2**50)
            timings.append((_headline(server, given.workers, seed), seed))
        best, seed = min(timings, key=lambda pair: pair[0].end_s)
        _memory(server)
    print("\nAgainst the plain script and against the limit, one core, processor time")
    _against_plain_study(Study.model_validate(_headline_study(seed)), best)
    _one_core()
    print("\nWork and precision, one core, processor time")
    _work_and_precision(given.diagram)
    _growth(given.workers, best, seed, given.full)
    print(f"\n{time.monotonic() - start_s:.0f} s; load average at the end {_load()}")
    return 0
