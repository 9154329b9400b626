"""The error budget of a point: what limits its C12(0), whether its grid held it, in words.

Two errors are stated of every value: the standard error, from the spread of the realizations,
and the discretization error, from a few of them computed again in other steps. The larger one
is named. The grid is judged apart: where it does not hold the light, neither error says so.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from solver.grid import Real

Limit = Literal["statistics", "steps", "grid", ""]

FEWEST_IN_COHERENCE_TIME = 2.0
"""Samples in a coherence time below which the intensity, of twice the band, is not resolved."""
LONGEST_IN_WINDOW = 4.0
"""Times that a window should hold the longest domain."""
STEPS_MATTER = 0.5
"""Discretization error, in standard errors, from which on it is worth a word."""


@dataclass(frozen=True)
class GridUse:
    """What a point asked of its grid and how its light sat on it.

    edge_share: largest share of a realization's energy at the edges of the band at the end of
    the line, among those that found the steps, and edge_limit what is allowed there; spread_ps:
    of arrival times, by the line; target: standard error asked for; most: realizations allowed.
    """

    window_ps: float
    samples_asked: int
    longest_lag_ps: float
    target: float
    most: int
    spread_ps: float
    edge_share: float
    edge_limit: float


@dataclass(frozen=True)
class Check:
    """One figure of the grid held against what it should be; the advice is empty where it is."""

    title: str
    value: float
    unit: str
    ok: bool
    advice: str = ""


@dataclass(frozen=True)
class Errors:
    """What is known of a point's C12(0)."""

    standard_error: float
    discretization_error: float
    realizations: int
    final: bool


def coherence_ps(spectra: Sequence[Real], bin_ghz: float, averaged: float) -> float:
    """Shortest coherence time of components of given power spectra, ps.

    ∫|γ(τ)|²dτ = ∫S²df/(∫S df)² (Goodman, Statistical Optics, ch. 5). Each bin of an estimated
    spectrum is the mean of ``averaged`` exponential variates, which ⟨S²⟩ has to be cleared of.
    """
    found = math.inf
    for density in spectra:
        total = float(density.sum())
        if total > 0.0:
            squares = float((density**2).sum()) / (1.0 + 1.0 / averaged)
            found = min(found, 1e3 * squares / total**2 / bin_ghz)
    return found


def longest_ps(durations: Real, width_ps: float) -> float:
    """Top of the highest bin of a distribution that holds anything, ps."""
    seen = np.flatnonzero(durations > 0.0)
    return float(seen[-1] + 1) * width_ps if len(seen) else math.nan


def checks(use: GridUse, samples: int, coherence: float, longest: float) -> list[Check]:
    """The checks of a grid of ``samples`` in the window at the end of the line.

    coherence: shortest coherence time there, ps; longest: domain seen, ps. What is not known,
    not finite that is, is left out.
    """
    more = f"use at least {2 * samples} samples in the same window"
    grown = samples > use.samples_asked
    made = [
        Check(
            "energy at the edges of the band",
            use.edge_share,
            "1",
            use.edge_share <= use.edge_limit,
            more if use.edge_share > use.edge_limit else "",
        ),
        Check(
            "samples used over samples asked for",
            samples / use.samples_asked,
            "1",
            True,
            f"the spectrum outgrew the band and got shorter time steps: ask for {samples} samples "
            "to see all of it"
            if grown
            else "",
        ),
    ]
    if math.isfinite(coherence):
        held = coherence * samples / use.window_ps
        made.append(_at_least("samples in a coherence time", held, FEWEST_IN_COHERENCE_TIME, more))
    if math.isfinite(longest):
        wanted = f"use a window of {LONGEST_IN_WINDOW * longest:.3g} ps or more"
        held = use.window_ps / longest
        made.append(_at_least("window over longest domain", held, LONGEST_IN_WINDOW, wanted))
    if use.spread_ps > 0.0:
        wanted = f"light meets itself come round: use a window of {use.spread_ps:.3g} ps or more"
        made.append(_at_least("window over spread", use.window_ps / use.spread_ps, 1.0, wanted))
    return made


def _at_least(title: str, value: float, limit: float, advice: str) -> Check:
    return Check(title, value, "1", value >= limit, "" if value >= limit else advice)


def limited_by(errors: Errors, made: Sequence[Check]) -> Limit:
    """The larger of the two errors, or the grid where it fails; empty where nothing is known."""
    if not all(check.ok for check in made):
        return "grid"
    if not (math.isfinite(errors.standard_error) and math.isfinite(errors.discretization_error)):
        return ""
    return "steps" if errors.discretization_error > errors.standard_error else "statistics"


def verdict(use: GridUse, errors: Errors, made: Sequence[Check]) -> str:
    """A sentence or two on what limits a point and what would help."""
    match limited_by(errors, made):
        case "":
            return "Too early to tell: there is no error bar yet."
        case "grid":
            worst = next(check for check in made if not check.ok)
            return f"Limited by the grid ({worst.title}: {worst.value:.3g}): {worst.advice}."
        case "steps":
            half = 0.5 * errors.discretization_error
            return (
                f"Limited by steps: they may shift it by {errors.discretization_error:.1g}, more "
                f"than the standard error, {errors.standard_error:.1g}. Ask for a standard error "
                f"of {max(10.0 * half, 1e-5):.1g} or less: steps then keep to a tenth of that."
            )
    said = (
        "Limited by statistics: 4 times more realizations, "
        f"{4 * errors.realizations}, for half the bar."
    )
    needed = math.ceil(errors.realizations * (errors.standard_error / use.target) ** 2)
    if errors.standard_error <= use.target:
        said += f" The target of {use.target:g} is met."
    elif errors.final:
        said += f" The target of {use.target:g} would take about {needed}."
    else:
        said += f" More are under way, {min(needed, use.most)} or so in all."
    if errors.discretization_error > STEPS_MATTER * errors.standard_error:
        said += " Steps come next: they matter from half of this bar on."
    return said


def budget(use: GridUse, errors: Errors, made: Sequence[Check]) -> dict[str, Any]:
    """Both errors, the checks and the verdict; JSON-able but for what is not finite."""
    return {
        "verdict": verdict(use, errors, made),
        "limited_by": limited_by(errors, made),
        "standard_error": errors.standard_error,
        "discretization_error": errors.discretization_error,
        "checks": [vars(check) for check in made],
    }


_FLAGS: dict[str, tuple[Limit, str]] = {
    "aliased": ("grid", "the spectrum outgrew every band that was tried"),
    "under_resolved": ("grid", "the light does not fit its band at the launch"),
    "non_finite": ("grid", "the field overflowed"),
    "tolerance_not_met": ("steps", "the accuracy asked for was out of reach"),
    "steps_too_long": ("steps", "no steps were short enough"),
}


def flagged(outcome: str, advice: str) -> dict[str, Any]:
    """The budget of a point without a value, from its outcome and the advice that came with it."""
    limit, words = _FLAGS[outcome]
    advised = f" {advice[:1].upper()}{advice[1:].rstrip('.')}." if advice else ""
    return {
        "verdict": f"Flagged, and left out of the curve: {words}.{advised}",
        "limited_by": limit,
        "standard_error": None,
        "discretization_error": None,
        "checks": [],
    }
