"""Fields down a line: steps, snapshots, outcome.

The tolerance is on the field at the end of the line, as the relative L2 norm of its error.
Two runs with different numbers of steps differ by a known multiple of that error, since the
order of the scheme is known, so the number of steps is found by Richardson's argument; a field
is accepted only when its error has been measured against another run of the whole line.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import fft

from solver.experiment import Precision, Span
from solver.fibre import sections
from solver.grid import Field, Grid, Real
from solver.schemes import FOURTH_ORDER, SECOND_ORDER, Scheme
from solver.track import COMPLETED, Light, Outcome, Piece, Track, Wave, edge_share, expected_steps
from solver.transforms import COMPLEX, batches

PATIENCE = 2
"""Times the steps are halved before a full band is put down to the light itself."""
STEP_LIMIT = 400_000
"""Steps down one line past which a tolerance is given up."""
BRIGHTEST_ROOT_W = 1e30
"""Amplitude past which the powers of powers that choose the steps would overflow."""


def scheme_for(tolerance: float) -> Scheme:
    """The scheme that meets a field tolerance with the fewest transforms."""
    return SECOND_ORDER if tolerance > 3e-4 else FOURTH_ORDER


def _power(field: Field) -> Real:
    return np.square(field.real, dtype=np.float64) + np.square(field.imag, dtype=np.float64)


def light_of(field: Field, spectrum: Field | None = None) -> Light:
    """The :class:`Light` of fields of shape (realizations, 2, samples), √W.

    spectrum: their transform, where it is known.
    """
    spectrum = fft.fft(field) if spectrum is None else spectrum
    power = np.sum(_power(field), axis=1)
    mean = max(float(power.mean()), np.finfo(float).tiny)
    density = np.mean(_power(spectrum), axis=(0, 1))
    return Light(
        float((power**2).mean()) / mean, density / max(density.sum(), np.finfo(float).tiny)
    )


def relative_error(field: Field, reference: Field) -> float:
    """Largest relative L2 distance of any realization from its reference."""
    distance, size = (
        np.sqrt(np.sum(_power(each), axis=(1, 2))) for each in (field - reference, reference)
    )
    return float(np.max(distance / np.maximum(size, np.finfo(float).tiny)))


def richardson(difference: float, ratio: float, order: int) -> float:
    """Error of the finer of two runs whose numbers of steps have the given ratio > 1."""
    return difference / (ratio**order - 1.0)


@dataclass(frozen=True)
class Propagation:
    """What :func:`propagate` returns.

    field: (realizations, 2, samples), √W, complex64 or complex128 as the precision asked.
    z_km: distances of the snapshots, or of the end alone; snapshots: (len(z_km), realizations,
    2, samples) or None. steps: steps of the accepted run; transforms: batch transforms spent,
    trial runs included; error: its measured relative error, nan where the outcome is not
    ``completed``.
    """

    field: Field
    z_km: Real
    snapshots: Field | None
    steps: int
    transforms: int
    error: float
    outcome: Outcome


def propagate(
    field: Field,
    *,
    time_step_ps: float,
    line: Sequence[Span],
    tolerance: float = 1e-6,
    precision: Precision = "double",
    snapshots_km: Sequence[float] | None = None,
    wavelength_nm: float = 1552.0,
    fibre_seed: int = 0,
) -> Propagation:
    """Propagate fields down a line of fibre to a stated accuracy.

    field: complex, shape (realizations, 2, samples), √W, samples even; periodic in time.
    tolerance: relative L2 error of the field at the end, for every realization.
    snapshots_km: ascending distances in [0, length]; the field at each is returned.
    wavelength_nm: converts a span's D into β2; unused where β2 is given.
    fibre_seed: draws the random sections of spans with polarization-mode dispersion.

    Raises ValueError for arguments out of range. A field that cannot be resolved on its grid,
    overflows, or does not meet the tolerance is returned as far as it went, with a named
    outcome that says what to do: look at ``outcome.kind`` before using ``field``.
    """
    field = _checked_field(field)
    if not (math.isfinite(time_step_ps) and time_step_ps > 0.0):
        raise ValueError("time_step_ps must be positive")
    if not 1e-13 <= tolerance <= 0.5:
        raise ValueError("tolerance must lie between 1e-13 and 0.5")
    if precision not in COMPLEX:
        raise ValueError("precision must be 'single' or 'double'")
    if not line:
        raise ValueError("line must hold at least one span")
    length = sum(span.length_km for span in line)
    wanted = [] if snapshots_km is None else [float(z) for z in snapshots_km]
    if any(not 0.0 <= z <= length * (1 + 1e-12) for z in wanted) or wanted != sorted(set(wanted)):
        raise ValueError(f"snapshots_km must ascend within 0 to {length:g} km")

    grid = Grid(field.shape[2], time_step_ps)
    track = Track(sections(line, grid, wavelength_nm, fibre_seed), grid, wanted)
    result = np.array(field, dtype=COMPLEX[precision])
    kept = (
        None
        if snapshots_km is None
        else np.zeros((len(wanted), *field.shape), dtype=COMPLEX[precision])
    )
    steps = spent = 0
    error = 0.0
    outcome = COMPLETED
    for batch in batches(range(field.shape[0]), grid.samples):
        rows = slice(batch.start, batch.stop)
        part = _propagate_batch(track, field[rows], tolerance, precision, wanted)
        result[rows] = part.field
        if kept is not None and part.snapshots is not None:
            kept[:, rows] = part.snapshots
        steps, spent = max(steps, part.steps), spent + part.transforms
        error = float(np.maximum(error, part.error))
        if outcome.kind == "completed":
            outcome = part.outcome
    z_km = np.array(wanted if snapshots_km is not None else [length])
    return Propagation(result, z_km, kept, steps, spent, error, outcome)


def _checked_field(field: Field) -> Field:
    field = np.asarray(field)
    if field.ndim != 3 or field.shape[1] != 2 or field.shape[0] < 1:
        raise ValueError("field must have the shape (realizations, 2, samples)")
    if field.shape[2] < 8 or field.shape[2] % 2:
        raise ValueError("field must have an even number of samples, 8 or more")
    field = field.astype(np.complex128)
    if not np.isfinite(field).all():
        raise ValueError("field must be finite: it holds NaN or infinity")
    if np.abs(field).max() > BRIGHTEST_ROOT_W:
        raise ValueError(f"field must stay within {BRIGHTEST_ROOT_W:g} √W")
    return field


def edge_limit(tolerance: float, precision: Precision) -> float:
    """Share of the energy allowed at the edges: an amplitude of a third of the tolerance."""
    floor = 1e-10 if precision == "single" else 1e-24
    return max(tolerance**2 / 9.0, floor)


def _propagate_batch(
    track: Track, field: Field, tolerance: float, precision: Precision, wanted: Sequence[float]
) -> Propagation:
    scheme = scheme_for(tolerance)
    field = field.astype(COMPLEX[precision])
    spectrum = fft.fft(field)
    weights = track.weights(scheme, light_of(field, spectrum))
    limit = edge_limit(tolerance, precision)
    spent = 0

    def finish(run: "_Run", error: float, outcome: Outcome) -> Propagation:
        return Propagation(
            run.field, np.array(wanted), run.snapshots, run.steps, spent, error, outcome
        )

    def run(steps: float, keep: bool) -> "_Run":
        nonlocal spent
        pieces = track.pieces(weights, steps)
        made = _run(track, field, pieces, scheme, limit, wanted if keep else ())
        spent += made.steps * scheme.transforms_per_step
        return made

    share = edge_share(spectrum, track.grid.samples // 2)
    if share > limit:
        untouched = _Run(field, None, 0, COMPLETED)
        return finish(
            untouched,
            math.nan,
            Outcome(
                "under_resolved",
                f"the input fills its band (share of the energy at its edges {share:.1e}, "
                f"allowed {limit:.1e}): use a time step of {track.grid.time_step_ps / 2:g} ps "
                "or less, or a looser tolerance",
                0.0,
            ),
        )

    keep = bool(wanted)
    steps = expected_steps(weights, scheme, tolerance)
    if steps > STEP_LIMIT:
        shortest = run(1, False)  # tells whether the arithmetic holds such a field at all
        if shortest.outcome.kind == "non_finite":
            return finish(shortest, math.nan, shortest.outcome)
        return finish(
            shortest,
            math.nan,
            Outcome(
                "tolerance_not_met",
                f"it would take about {steps:.1g} steps, more than the {STEP_LIMIT} allowed: "
                "lower the power, shorten the line or loosen the tolerance",
                0.0,
            ),
        )
    coarse = run(steps / 2, False)
    for _ in range(PATIENCE):
        if coarse.outcome.kind != "aliased":
            break
        # Steps that are too long scatter energy to the edges of the band by themselves.
        steps *= 2.0
        coarse = run(steps / 2, False)
    if coarse.outcome.kind != "completed":
        return finish(coarse, math.nan, coarse.outcome)
    previous_error = math.inf
    while True:
        fine = run(max(steps, 1.25 * coarse.steps), keep)
        if fine.outcome.kind != "completed":
            return finish(fine, math.nan, fine.outcome)
        if not weights.any():
            return finish(fine, 0.0, COMPLETED)
        if fine.steps == coarse.steps:
            # Every stretch had its one step in both: two such runs would measure nothing.
            steps = 2.0 * fine.steps
            continue
        error = richardson(
            relative_error(coarse.field, fine.field), fine.steps / coarse.steps, scheme.order
        )
        if error <= tolerance:
            return finish(fine, error, COMPLETED)
        growth = (1.3 * error / tolerance) ** (1 / scheme.order)
        stalled = error > 0.5 * previous_error
        if stalled or fine.steps * growth > STEP_LIMIT:
            reason = (
                "rounding errors dominate: loosen the tolerance or use double precision"
                if stalled
                else "it would take too many steps: loosen the tolerance or shorten the line"
            )
            return finish(
                fine,
                error,
                Outcome(
                    "tolerance_not_met",
                    f"reached a relative error of {error:.1e} instead of {tolerance:.1e}; {reason}",
                    track.length_km,
                ),
            )
        previous_error, coarse = error, fine
        steps = fine.steps * min(max(growth, 1.25), 8.0)


@dataclass(frozen=True)
class _Run:
    field: Field
    snapshots: Field | None
    steps: int
    outcome: Outcome


def _run(
    track: Track,
    field: Field,
    pieces: Sequence[Piece],
    scheme: Scheme,
    limit: float,
    wanted: Sequence[float],
) -> _Run:
    wave = Wave(field)
    snapshots = None
    if wanted:
        snapshots = np.zeros((len(wanted), *field.shape), dtype=field.dtype)
        if wanted[0] == 0.0:
            snapshots[0] = field
    offset = 0 if wanted and wanted[0] == 0.0 else 1

    def observe(index: int, here: Field) -> None:
        if snapshots is not None:
            snapshots[index - offset] = here

    outcome = track.march(
        wave, pieces, scheme, edge_limit=limit, observe=observe, phases=bool(wanted)
    )
    wave.settle()
    steps = sum(piece.steps for piece in pieces)
    return _Run(wave.field.copy(), snapshots, steps, outcome)
