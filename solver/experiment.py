"""Every parameter of an experiment and of a study: name, unit, bound, default and help.

This is the one definition. The API schema, the page's form, the study file of the command
line and the attributes of the result file are all read from the models below.

Paths such as ``"launch.total_power_mw"`` or ``"line.*.coupling"`` name a parameter inside an
:class:`Experiment`; ``*`` stands for every span of the line.
"""

import hashlib
import json
import math
from collections.abc import Iterator
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, ConfigDict, Field, JsonValue, model_validator

from solver.units import beta2_from_dispersion

NUMERICS = "2"
"""Version of everything that decides a result's digits; part of a study's identity."""

SpectrumShape = Literal["gaussian", "super_gaussian", "rectangular", "sech2"]
RelationKind = Literal["independent", "derivative", "hilbert", "delayed", "partial", "identical"]
Coupling = Literal["manakov", "linear_birefringent", "isotropic_circular", "uncoupled", "custom"]
Precision = Literal["single", "double"]
FilterShape = Literal["none", "gaussian", "bessel4", "butterworth4"]

COUPLING_COEFFICIENTS: dict[str, tuple[float, float]] = {
    "manakov": (8 / 9, 8 / 9),
    "linear_birefringent": (1.0, 2 / 3),
    "isotropic_circular": (2 / 3, 4 / 3),
    "uncoupled": (8 / 9, 0.0),
}
"""(self, cross) Kerr coefficients of each named coupling."""


class Contradiction(ValueError):
    """Parameters that exclude one another; ``where`` is the path of the one to change."""

    def __init__(self, where: str, message: str) -> None:
        super().__init__(message)
        self.where = where


def quantity(
    default: Any,
    title: str,
    help: str,
    *,
    unit: str = "",
    low: float | None = None,
    high: float | None = None,
    when: dict[str, list[str]] | None = None,
    **extra: Any,
) -> Any:
    """A pydantic field with the metadata the form needs.

    ``when`` names sibling parameters and the values for which this one applies.
    """
    schema: dict[str, JsonValue] = {"unit": unit}
    if when:
        schema["when"] = {name: list(values) for name, values in when.items()}
    return Field(
        default,
        title=title,
        description=help,
        ge=low,
        le=high,
        json_schema_extra=schema,
        **extra,
    )


class Stage(BaseModel):
    """Base of every stage: frozen, strict about unknown names, no NaN and no infinity."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


class Source(Stage):
    """Thermal-like light: circular complex Gaussian noise under a power spectrum."""

    shape: SpectrumShape = quantity(
        "gaussian", "Spectrum", "Shape of the power spectrum of the source."
    )
    width_ghz: float = quantity(
        24.0,
        "Width",
        "Full width at half maximum of the power spectrum.",
        unit="GHz",
        low=0.1,
        high=5000.0,
    )
    order: int = quantity(
        4,
        "Order",
        "Order m of the super-Gaussian exp(−|f/f0|^2m); 1 is a Gaussian.",
        low=1,
        high=20,
        when={"shape": ["super_gaussian"]},
    )
    wavelength_nm: float = quantity(
        1552.0,
        "Wavelength",
        "Centre wavelength; converts dispersion D into β2.",
        unit="nm",
        low=400.0,
        high=2500.0,
    )


class Relation(Stage):
    """How component 2 is made from component 1."""

    kind: RelationKind = quantity(
        "independent",
        "Input relation",
        "Component 2 is an independent draw, or component 1 through the named filter.",
    )
    notch_ghz: float = quantity(
        0.0,
        "Notch",
        "Full width of the blocked band around the carrier, where no real shaper makes the "
        "ideal sign step.",
        unit="GHz",
        low=0.0,
        high=1000.0,
        when={"kind": ["hilbert"]},
    )
    delay_ps: float = quantity(
        50.0,
        "Delay",
        "Delay of component 2 against component 1.",
        unit="ps",
        low=-1e5,
        high=1e5,
        when={"kind": ["delayed"]},
    )
    correlation: float = quantity(
        0.5,
        "Shared power",
        "Fraction ρ of component 2's power that repeats component 1; the rest is independent.",
        low=0.0,
        high=1.0,
        when={"kind": ["partial"]},
    )


class Launch(Stage):
    """Powers and imperfections at the fibre input."""

    total_power_mw: float = quantity(
        200.0,
        "Total power",
        "Mean launch power of both components together.",
        unit="mW",
        low=1e-6,
        high=1e5,
    )
    share_1: float = quantity(
        0.5,
        "Share of component 1",
        "Fraction of the total power launched into component 1.",
        low=0.0,
        high=1.0,
    )
    skew_ps: float = quantity(
        0.0,
        "Skew",
        "Extra delay of component 2 at the input, whatever the relation.",
        unit="ps",
        low=-1e5,
        high=1e5,
    )
    crosstalk_db: float | None = quantity(
        None,
        "Crosstalk",
        "Power leaking from each component into the other at the launch; empty for none.",
        unit="dB",
        low=-100.0,
        high=-3.0,
    )


class Span(Stage):
    """One uniform piece of fibre. What is not given is absent."""

    length_km: float = quantity(
        ..., "Length", "Length of the span.", unit="km", low=1e-6, high=10_000.0
    )
    dispersion_ps_per_nm_km: float | None = quantity(
        None,
        "Dispersion D",
        "Chromatic dispersion; negative is normal. Give this or β2.",
        unit="ps/(nm·km)",
        low=-10_000.0,
        high=10_000.0,
    )
    beta2_ps2_per_km: float | None = quantity(
        None,
        "β2",
        "Group-velocity dispersion; positive is normal. Give this or D.",
        unit="ps²/km",
        low=-10_000.0,
        high=10_000.0,
    )
    beta3_ps3_per_km: float = quantity(
        0.0, "β3", "Third-order dispersion.", unit="ps³/km", low=-1000.0, high=1000.0
    )
    loss_db_per_km: float = quantity(0.0, "Loss", "Power loss.", unit="dB/km", low=0.0, high=1000.0)
    gamma_per_w_km: float = quantity(
        0.0,
        "Nonlinear coefficient γ",
        "Kerr coefficient before the factors of the coupling.",
        unit="1/(W·km)",
        low=0.0,
        high=10_000.0,
    )
    coupling: Coupling = quantity(
        "manakov",
        "Coupling",
        "Self and cross Kerr factors: manakov 8/9, 8/9; linear_birefringent 1, 2/3; "
        "isotropic_circular 2/3, 4/3; uncoupled 8/9, 0; custom as given.",
    )
    self_coefficient: float | None = quantity(
        None,
        "Self factor",
        "Kerr factor of a component's own power.",
        low=0.0,
        high=10.0,
        when={"coupling": ["custom"]},
    )
    cross_coefficient: float | None = quantity(
        None,
        "Cross factor",
        "Kerr factor of the other component's power.",
        low=0.0,
        high=10.0,
        when={"coupling": ["custom"]},
    )
    delay_ps_per_km: float = quantity(
        0.0,
        "Group-delay difference δ",
        "Delay of component 1 behind component 2, per km.",
        unit="ps/km",
        low=-10_000.0,
        high=10_000.0,
    )
    pmd_ps_per_sqrt_km: float = quantity(
        0.0,
        "PMD",
        "Polarization-mode dispersion coefficient: mean differential delay over √length.",
        unit="ps/√km",
        low=0.0,
        high=100.0,
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.dispersion_ps_per_nm_km is None and self.beta2_ps2_per_km is None:
            raise Contradiction(
                "dispersion_ps_per_nm_km",
                "give the dispersion: dispersion_ps_per_nm_km or beta2_ps2_per_km",
            )
        if self.dispersion_ps_per_nm_km is not None and self.beta2_ps2_per_km is not None:
            raise Contradiction(
                "beta2_ps2_per_km",
                "dispersion_ps_per_nm_km and beta2_ps2_per_km are both given: keep one of them",
            )
        for name in ("self_coefficient", "cross_coefficient"):
            given = getattr(self, name) is not None
            if self.coupling == "custom" and not given:
                raise Contradiction(name, f"coupling custom needs {name}")
            if self.coupling != "custom" and given:
                raise Contradiction(
                    name, f"{name} applies to coupling custom only: leave it out or choose custom"
                )
        if self.pmd_ps_per_sqrt_km and self.coupling != "manakov":
            raise Contradiction(
                "pmd_ps_per_sqrt_km",
                "random polarization-mode dispersion mixes the components, which only the "
                "manakov coupling allows: choose manakov or set it to 0",
            )
        return self

    def beta2(self, wavelength_nm: float) -> float:
        """β2 in ps²/km, from whichever of D and β2 was given."""
        if self.beta2_ps2_per_km is not None:
            return self.beta2_ps2_per_km
        assert self.dispersion_ps_per_nm_km is not None
        return beta2_from_dispersion(self.dispersion_ps_per_nm_km, wavelength_nm)

    def kerr_coefficients(self) -> tuple[float, float]:
        """(self, cross) factors that multiply γ."""
        if self.self_coefficient is not None and self.cross_coefficient is not None:
            return self.self_coefficient, self.cross_coefficient
        return COUPLING_COEFFICIENTS[self.coupling]


class Receiver(Stage):
    """Polarization demultiplexer and square-law detection."""

    extinction_db: float | None = quantity(
        None,
        "Demultiplexer extinction",
        "Power of the unwanted component in each arm; empty for ideal.",
        unit="dB",
        low=-100.0,
        high=-3.0,
    )
    filter: FilterShape = quantity(
        "none",
        "Electrical low-pass",
        "Response of photodiode and digitizer together; none for an ideal receiver.",
    )
    bandwidth_ghz: float = quantity(
        33.0,
        "Bandwidth",
        "Frequency at which the electrical power transfer |H|² is one half.",
        unit="GHz",
        low=0.01,
        high=1000.0,
        when={"filter": ["gaussian", "bessel4", "butterworth4"]},
    )


class Ensemble(Stage):
    """Grid, draws and estimators."""

    window_ps: float = quantity(
        8192.0, "Window", "Periodic time window.", unit="ps", low=1.0, high=1e7
    )
    samples: int = quantity(
        4096,
        "Samples",
        "Samples in the window, a power of two.",
        low=256,
        high=2**22,
    )
    standard_error_target: float = quantity(
        0.01,
        "Standard error target",
        "Realizations are added to each point until the standard error of C12(0) is this small.",
        low=1e-5,
        high=0.5,
    )
    min_realizations: int = quantity(
        16,
        "Fewest realizations",
        "Realizations before the target is looked at.",
        low=4,
        high=100_000,
    )
    max_realizations: int = quantity(
        256,
        "Most realizations",
        "Cap for each point; a point that stops here says so.",
        low=4,
        high=1_000_000,
    )
    seed: int = quantity(20, "Seed", "Fixes every random draw.", low=0, high=2**53 - 1)
    precision: Precision = quantity(
        "single", "Precision", "Arithmetic of the ensemble; single is enough for statistics."
    )
    field_tolerance: float = quantity(
        0.05,
        "Field tolerance",
        "Relative L2 error of the field allowed in the ensemble. Steps are also short enough to "
        "keep the bias of C12(0) under a tenth of the standard error target.",
        low=1e-9,
        high=0.3,
    )
    distances: int = quantity(
        16,
        "Distances",
        "Equal parts of the line at whose ends C12(0) is recorded.",
        low=1,
        high=128,
    )
    max_lag_ps: float = quantity(
        400.0, "Longest lag", "Correlations are kept up to this lag.", unit="ps", low=1.0, high=1e5
    )
    wall_smoothing_ps: float = quantity(
        8.0,
        "Wall smoothing",
        "Width of the running mean of S0 and S1 before walls are counted as sign changes.",
        unit="ps",
        low=0.0,
        high=1e4,
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.samples & (self.samples - 1):
            near = 2 ** round(math.log2(self.samples))
            raise Contradiction("samples", f"samples must be a power of two: {near} is the nearest")
        if self.max_realizations < self.min_realizations:
            raise Contradiction(
                "max_realizations",
                f"max_realizations must be at least min_realizations, {self.min_realizations}",
            )
        if self.max_lag_ps > self.window_ps / 2:
            raise Contradiction(
                "max_lag_ps",
                f"max_lag_ps must be at most half the window, {self.window_ps / 2:g} ps",
            )
        if self.precision == "single" and self.field_tolerance < 1e-3:
            raise Contradiction(
                "field_tolerance",
                "single precision cannot resolve a field tolerance below 1e-3: "
                "choose double or loosen the tolerance",
            )
        return self

    @property
    def time_step_ps(self) -> float:
        """Time between samples, ps."""
        return self.window_ps / self.samples


Line = Annotated[
    tuple[Span, ...],
    Field(
        min_length=1,
        max_length=64,
        title="Line",
        description="Spans of fibre, in order from the launch.",
    ),
]


class Experiment(Stage):
    """Everything that fixes a result, in the order in which the light meets it."""

    source: Source = Source()
    relation: Relation = Relation()
    launch: Launch = Launch()
    line: Line = (
        Span(
            length_km=8.0,
            dispersion_ps_per_nm_km=-13.0,
            loss_db_per_km=0.24,
            gamma_per_w_km=2.5,
        ),
    )
    receiver: Receiver = Receiver()
    ensemble: Ensemble = Ensemble()

    @model_validator(mode="after")
    def _fits_grid(self) -> Self:
        nyquist_ghz = 500.0 / self.ensemble.time_step_ps
        if self.source.width_ghz > nyquist_ghz / 2:
            needed = 2 ** math.ceil(
                math.log2(self.ensemble.window_ps * self.source.width_ghz * 4 / 1000.0)
            )
            raise Contradiction(
                "ensemble.samples",
                f"the source, {self.source.width_ghz:g} GHz wide, does not fit the grid, which "
                f"holds ±{nyquist_ghz:g} GHz: use {needed} samples or more in this window",
            )
        if self.source.width_ghz * self.ensemble.window_ps < 8000.0:
            raise Contradiction(
                "ensemble.window_ps",
                "the window holds fewer than 8 coherence times of the source: use at least "
                f"{8000.0 / self.source.width_ghz:.4g} ps",
            )
        if self.relation.kind == "hilbert" and self.relation.notch_ghz > self.source.width_ghz:
            raise Contradiction(
                "relation.notch_ghz",
                "the notch removes the source: use at most its width, "
                f"{self.source.width_ghz:g} GHz",
            )
        return self

    @property
    def length_km(self) -> float:
        """Length of the whole line, km."""
        return sum(span.length_km for span in self.line)


def _set_path(tree: Any, path: str, value: JsonValue) -> None:
    """Set one parameter in a dumped experiment, in place; KeyError names the unknown path."""
    head, _, rest = path.partition(".")
    if isinstance(tree, list | tuple):
        if head == "*":
            for item in tree:
                _set_path(item, rest, value)
            return
        if not head.isdigit() or int(head) >= len(tree):
            raise KeyError(path)
        _set_path(tree[int(head)], rest, value)
        return
    if not isinstance(tree, dict) or head not in tree:
        raise KeyError(path)
    if rest:
        _set_path(tree[head], rest, value)
    else:
        tree[head] = value


def with_changes(experiment: Experiment, changes: dict[str, JsonValue]) -> Experiment:
    """The experiment with some parameters replaced, validated anew.

    Raises Contradiction for a path that names no parameter, pydantic.ValidationError for a
    value out of bounds.
    """
    tree = experiment.model_dump()
    for path, value in changes.items():
        try:
            _set_path(tree, path, value)
        except KeyError:
            raise Contradiction(path, f"{path} names no parameter of the experiment") from None
    return Experiment.model_validate(tree)


def numeric_parameters() -> Iterator[tuple[str, str, str]]:
    """(path, title, unit) of every parameter a sweep may run over."""
    stages: list[tuple[str, type[Stage]]] = [
        ("source", Source),
        ("relation", Relation),
        ("launch", Launch),
        ("line.*", Span),
        ("receiver", Receiver),
    ]
    for prefix, stage in stages:
        for name, field in stage.model_fields.items():
            if field.annotation in (float, float | None):
                extra = field.json_schema_extra
                unit = str(extra.get("unit", "")) if isinstance(extra, dict) else ""
                yield f"{prefix}.{name}", field.title or name, unit


class Sweep(Stage):
    """The axis of a study."""

    parameter: str = quantity(
        "launch.total_power_mw", "Swept parameter", "Path of the parameter that varies."
    )
    start: float = quantity(5.0, "From", "First value, in the parameter's unit.")
    stop: float = quantity(800.0, "To", "Last value, in the parameter's unit.")
    points: int = quantity(12, "Points", "Number of values.", low=1, high=10_000)
    spacing: Literal["log", "linear"] = quantity(
        "log", "Spacing", "Equal ratios or equal differences."
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        known = {path for path, _, _ in numeric_parameters()}
        if self.parameter not in known:
            raise Contradiction("parameter", f"{self.parameter} is not a numeric parameter")
        if self.spacing == "log" and min(self.start, self.stop) <= 0.0:
            raise Contradiction("start", "log spacing needs positive ends: choose linear")
        if self.points > 1 and self.start == self.stop:
            raise Contradiction("stop", "the sweep has no width: stop must differ from start")
        return self

    def values(self) -> list[float]:
        """The values of the swept parameter, rounded to 12 digits so that they print well."""
        if self.points == 1:
            return [self.start]
        fractions = [i / (self.points - 1) for i in range(self.points)]
        if self.spacing == "log":
            ratio = self.stop / self.start
            return [float(f"{self.start * ratio**x:.12g}") for x in fractions]
        return [float(f"{self.start + (self.stop - self.start) * x:.12g}") for x in fractions]


class Variant(Stage):
    """One curve of a study: the experiment with some parameters changed."""

    name: str = quantity("as given", "Name", "Label of the curve.", min_length=1, max_length=80)
    changes: dict[str, JsonValue] = quantity(
        {}, "Changes", "Parameters that differ from the experiment, by path.", max_length=32
    )


HEADLINE_VARIANTS = (
    Variant(
        name="independent",
        changes={"relation.kind": "independent", "line.*.coupling": "manakov"},
    ),
    Variant(
        name="derivative",
        changes={"relation.kind": "derivative", "line.*.coupling": "manakov"},
    ),
    Variant(
        name="derivative, coupling off",
        changes={"relation.kind": "derivative", "line.*.coupling": "uncoupled"},
    ),
)


AXES_OF = ("window_ps", "samples", "distances", "max_lag_ps")
"""Ensemble parameters that fix the axes of a study's results, and so belong to all variants."""


class Study(Stage):
    """An experiment, the axis swept and the variants compared. A run is its study."""

    experiment: Experiment = Experiment()
    sweep: Sweep = Sweep()
    variants: Annotated[
        tuple[Variant, ...],
        Field(
            min_length=1,
            max_length=24,
            title="Variants",
            description="The curves to compare; each changes some parameters.",
        ),
    ] = HEADLINE_VARIANTS

    @model_validator(mode="after")
    def _every_point_is_valid(self) -> Self:
        names = [variant.name for variant in self.variants]
        if len(set(names)) < len(names):
            raise Contradiction("variants", "two variants have the same name: rename one")
        ends = {self.sweep.start, self.sweep.stop}
        for index, variant in enumerate(self.variants):
            for value in ends:
                try:
                    made = with_changes(
                        self.experiment, {**variant.changes, self.sweep.parameter: value}
                    )
                    self._share_axes(made)
                except Contradiction as error:
                    raise Contradiction(f"variants.{index}.changes", str(error)) from None
                except ValueError as error:
                    problem = error.errors()[0] if hasattr(error, "errors") else {}
                    path = ".".join(str(part) for part in problem.get("loc", ()))
                    raise Contradiction(
                        "sweep" if path == self.sweep.parameter else f"variants.{index}.changes",
                        f"{path or 'experiment'}: {problem.get('msg', error)}",
                    ) from None
        return self

    def _share_axes(self, variant: Experiment) -> None:
        for name in AXES_OF:
            if getattr(variant.ensemble, name) != getattr(self.experiment.ensemble, name):
                raise Contradiction(
                    f"ensemble.{name}",
                    f"ensemble.{name} sets an axis that all variants share: change it in the "
                    "experiment",
                )

    def experiment_at(self, variant: int, point: int) -> Experiment:
        """The experiment of one point of one curve."""
        value = self.sweep.values()[point]
        changes = {**self.variants[variant].changes, self.sweep.parameter: value}
        return with_changes(self.experiment, changes)

    @property
    def identity(self) -> str:
        """Hash of the whole study, seed included, and of the numerics: 16 hexadecimal digits."""
        canonical = json.dumps(
            {"numerics": NUMERICS, "study": self.model_dump(mode="json")},
            sort_keys=True,
            separators=(",", ":"),
        )
        return hashlib.sha256(canonical.encode()).hexdigest()[:16]
