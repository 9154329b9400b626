"""What has been found of one point of one curve."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from solver.budget import (
    Check,
    Errors,
    GridUse,
    budget,
    checks,
    coherence_ps,
    flagged,
    longest_ps,
)
from solver.findings import Invariants, LinearRegime, Picture, Scales
from solver.pairing import Difference
from solver.statistics import CORRELATIONS, Estimate
from solver.view import estimates_view, figures_view, named, number, numbers, pair


@dataclass(frozen=True)
class PointResult:
    """Every estimate of one point of one curve, so far or for good.

    steps: of the line; samples: of the window at its end; transforms: of batches, trials included.
    difference: from the first variant at the same value of the sweep, common realizations only.
    estimates holds :data:`solver.statistics.ESTIMATES` by name; it is empty where the outcome
    is not ``completed``.
    """

    variant: int
    point: int
    realizations: int
    target_met: bool
    final: bool
    outcome: str = "completed"
    advice: str = ""
    discretization_error: float = 0.0
    steps: int = 0
    transforms: int = 0
    samples: int = 0
    length_km: float = 0.0
    estimates: Mapping[str, Estimate] = field(default_factory=dict)
    linear: LinearRegime | None = None
    difference: Difference | None = None
    use: GridUse | None = None
    picture: Picture | None = None
    invariants: Invariants | None = None
    scales: Scales | None = None

    @property
    def central(self) -> tuple[float, float] | None:
        """C12(0) at the end of the line and its standard error, where there is one."""
        if not self.estimates:
            return None
        value, error = self.estimates["distance"]
        return float(value[-1]), float(error[-1])

    def summary(self) -> dict[str, Any]:
        """What the curve needs of the point; JSON-able."""
        central = self.central
        linear = self.linear
        return {
            "variant": self.variant,
            "point": self.point,
            "value": central and number(central[0]),
            "standard_error": central and number(central[1]),
            "discretization_error": central and number(self.discretization_error),
            "linear": linear and number(linear.cross[len(linear.cross) // 2]),
            "limited_by": self.budget().get("limited_by", ""),
            "difference": self._difference(),
            "along": central and pair(self.estimates["distance"]),
            "figures": figures_view(self.estimates) if central and self.final else None,
            "realizations": self.realizations,
            "target_met": self.target_met,
            "outcome": self.outcome,
            "advice": self.advice,
            "final": self.final,
            "has_map": self.picture is not None,
            "length_km": self.length_km,
        }

    def _difference(self) -> dict[str, float | None] | None:
        if self.difference is None:
            return None
        return {name: number(value) for name, value in vars(self.difference).items()}

    def budget(self) -> dict[str, Any]:
        """Both errors, the checks of the grid and a verdict in words; JSON-able."""
        if self.outcome != "completed":
            return flagged(self.outcome, self.advice)
        central, use = self.central, self.use
        if central is None or use is None:
            return {}
        errors = Errors(central[1], self.discretization_error, self.realizations, self.final)
        made = budget(use, errors, self._checks(use))
        for check in made["checks"]:
            check["value"] = number(check["value"])
        made["standard_error"] = number(central[1])
        made["discretization_error"] = number(self.discretization_error)
        return made

    def _checks(self, use: GridUse) -> list[Check]:
        found = self.estimates
        spectra = [found[name].value for name in ("output1", "output2")]
        bins = len(spectra[0])
        coherence = coherence_ps(
            spectra,
            bin_ghz=1e3 * use.samples_asked / use.window_ps / bins,
            averaged=self.realizations * use.samples_asked / bins,
        )
        durations = found["durations"].value
        longest = longest_ps(durations, use.longest_lag_ps / len(durations))
        return checks(use, self.samples, coherence, longest)

    def detail(self) -> dict[str, Any]:
        """Everything but the map; JSON-able."""
        if not self.estimates:
            return {"summary": self.summary(), "budget": self.budget()}
        shown = estimates_view(self.estimates)
        if self.linear is not None:
            for name in CORRELATIONS:
                shown["correlations"][name]["linear"] = numbers(getattr(self.linear, name))
        return {
            "summary": self.summary(),
            **shown,
            "invariants": self.invariants and named(vars(self.invariants)),
            "scales": self.scales and named(vars(self.scales)),
            "budget": self.budget(),
            "steps": self.steps,
            "transforms": self.transforms,
            "samples": self.samples,
        }
