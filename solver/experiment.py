"""An experiment, and a study of it: everything that fixes a result.

The parameters themselves are defined once, in :mod:`solver.sending`, :mod:`solver.span` and
:mod:`solver.receiving`.

Paths such as ``"launch.total_power_mw"`` or ``"line.*.coupling"`` name a parameter inside an
:class:`Experiment`; ``*`` stands for every span of the line.
"""

import hashlib
import json
import math
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Annotated, Any, Literal, Self

from pydantic import Field, JsonValue, model_validator

from solver.extent import Suggestion, spread_ps, suggest
from solver.quantity import Contradiction, Stage, quantity
from solver.receiving import Ensemble, FilterShape, Precision, Receiver
from solver.sending import (
    Amplifier,
    Launch,
    MeasuredSpectrum,
    Relation,
    RelationKind,
    Shaper,
    Source,
    SpectrumShape,
)
from solver.span import COUPLING_COEFFICIENTS, Coupling, Span

__all__ = [
    "AXES_OF",
    "COUPLING_COEFFICIENTS",
    "HEADLINE_VARIANTS",
    "NUMERICS",
    "Amplifier",
    "Contradiction",
    "Coupling",
    "Ensemble",
    "Experiment",
    "FilterShape",
    "Launch",
    "Line",
    "MeasuredSpectrum",
    "Precision",
    "Receiver",
    "Relation",
    "RelationKind",
    "Shaper",
    "Source",
    "Span",
    "SpectrumShape",
    "Stage",
    "Study",
    "Sweep",
    "Variant",
    "numeric_parameters",
    "title_and_unit",
    "with_changes",
]

NUMERICS = "3"
"""Version of everything that decides a result's digits; part of a study's identity."""

MOST_DELAY_LOSS_DB = 40.0
"""Power that a shaper's resolution may take from delayed light."""

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
    shaper: Shaper = Shaper()
    booster: Amplifier = Amplifier()
    launch: Launch = Launch()
    line: Line = (
        Span(
            length_km=8.0,
            dispersion_ps_per_nm_km=-13.0,
            loss_db_per_km=0.24,
            gamma_per_w_km=2.5,
        ),
    )
    preamplifier: Amplifier = Amplifier()
    receiver: Receiver = Receiver()
    ensemble: Ensemble = Ensemble()

    @model_validator(mode="after")
    def _fits_grid(self) -> Self:
        self._leaves_light()
        if self.ensemble.grid == "automatic":
            return self  # chosen, and then checked, with the study
        nyquist_ghz = 500.0 / self.ensemble.time_step_ps
        if self.source.full_width_ghz > nyquist_ghz / 2:
            needed = 2 ** math.ceil(
                math.log2(self.ensemble.window_ps * self.source.full_width_ghz * 4 / 1000.0)
            )
            raise Contradiction(
                "ensemble.samples",
                f"the source, {self.source.full_width_ghz:g} GHz wide, does not fit the grid, "
                f"which holds ±{nyquist_ghz:g} GHz: use {needed} samples or more in this window"
                + (", or take the noise floor off the spectrum" if self.source.measured else ""),
            )
        if self.source.coherence_width_ghz * self.ensemble.window_ps < 8000.0:
            raise Contradiction(
                "ensemble.window_ps",
                "the window holds fewer than 8 coherence times of the source: use at least "
                f"{8000.0 / self.source.coherence_width_ghz:.4g} ps",
            )
        self._delays_within_window()
        if self.booster.noise_figure_db is not None and self.booster.bandpass_ghz is None:
            raise Contradiction(
                "booster.bandpass_ghz",
                "the noise of a booster fills any grid: give the optical band-pass after it, "
                f"{4 * self.source.full_width_ghz:.3g} GHz for example",
            )
        for name in ("booster", "preamplifier"):
            band_ghz = getattr(self, name).bandpass_ghz
            if band_ghz is not None and band_ghz > nyquist_ghz:
                raise Contradiction(
                    f"{name}.bandpass_ghz",
                    f"a band-pass of {band_ghz:g} GHz does not fit the grid, which holds "
                    f"±{nyquist_ghz:g} GHz: use {nyquist_ghz:g} GHz or less, or more samples",
                )
        self._outlasts_line()
        return self

    def _leaves_light(self) -> None:
        """A filter that blocks the whole source would be made up for by boundless gain."""
        relation, shaper = self.relation, self.shaper
        widest_ghz = self.source.widest_notch_ghz
        if relation.kind == "hilbert" and relation.notch_ghz > widest_ghz:
            raise Contradiction(
                "relation.notch_ghz",
                f"a notch of {relation.notch_ghz:g} GHz about the carrier removes the source: use "
                f"at most {math.floor(1e3 * widest_ghz) / 1e3:g} GHz",
            )
        if relation.kind == "delayed" and shaper.resolution_ghz:
            # A Gaussian resolution of rms s is a Gaussian window over delays, of rms 1/(2πs).
            spread_thz = 1e-3 * shaper.resolution_ghz / math.sqrt(8.0 * math.log(2.0))
            loss_db = 10.0 / math.log(10.0) * (2.0 * math.pi * spread_thz * relation.delay_ps) ** 2
            if loss_db > MOST_DELAY_LOSS_DB:
                within = math.sqrt(MOST_DELAY_LOSS_DB / loss_db)
                raise Contradiction(
                    "shaper.resolution_ghz",
                    f"a shaper that resolves {shaper.resolution_ghz:g} GHz passes nothing at a "
                    f"delay of {relation.delay_ps:g} ps: use a resolution of "
                    f"{_floored(within * shaper.resolution_ghz):g} GHz or less, or a delay of at "
                    f"most {_floored(within * abs(relation.delay_ps)):g} ps",
                )

    def _delays_within_window(self) -> None:
        """A delay beyond half of a periodic window is seen as the rest to the whole window."""
        window_ps = self.ensemble.window_ps
        delay_ps = self.relation.delay_ps if self.relation.kind == "delayed" else 0.0
        total_ps = abs(delay_ps + self.launch.skew_ps)
        if total_ps > window_ps / 2:
            raise Contradiction(
                "relation.delay_ps" if abs(delay_ps) > window_ps / 2 else "launch.skew_ps",
                f"the components are {total_ps:g} ps apart at the launch, more than half the "
                f"window: use a window of {2.0 * total_ps:g} ps or more, or at most "
                f"{window_ps / 2:g} ps between them",
            )

    def _outlasts_line(self) -> None:
        """In a window shorter than the line's memory, light meets itself come round again."""
        spread = spread_ps(self, self.source.full_width_ghz)
        if spread <= self.ensemble.window_ps:
            return
        longer = 2 ** math.ceil(math.log2(spread / self.ensemble.window_ps))
        window_ps, samples = longer * self.ensemble.window_ps, longer * self.ensemble.samples
        shorter_km = self.length_km * self.ensemble.window_ps / spread
        raise Contradiction(
            "ensemble.window_ps",
            f"the line, {self.length_km:.4g} km, spreads the source over {spread:.4g} ps, more "
            f"than the window: use a window of {window_ps:g} ps with {samples} samples, or a line "
            f"of about {shorter_km:.3g} km",
        )

    @property
    def light(self) -> "Experiment":
        """The same up to the end of the line, with nothing behind it."""
        return self.model_copy(update={"preamplifier": Amplifier(), "receiver": Receiver()})

    @property
    def length_km(self) -> float:
        """Length of the whole line, km."""
        return sum(span.length_km for span in self.line)


def _floored(value: float) -> float:
    """A little less, in three digits."""
    digits = 2 - math.floor(math.log10(value))
    return math.floor(value * 10.0**digits) / 10.0**digits


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
        ("shaper", Shaper),
        ("booster", Amplifier),
        ("launch", Launch),
        ("line.*", Span),
        ("preamplifier", Amplifier),
        ("receiver", Receiver),
    ]
    for prefix, stage in stages:
        for name, field in stage.model_fields.items():
            if field.annotation in (float, float | None):
                extra = field.json_schema_extra
                unit = str(extra.get("unit", "")) if isinstance(extra, dict) else ""
                yield f"{prefix}.{name}", field.title or name, unit


def title_and_unit(parameter: str) -> tuple[str, str]:
    """Title and unit of a parameter that a sweep may run over."""
    return next((title, unit) for path, title, unit in numeric_parameters() if path == parameter)


class Sweep(Stage):
    """An axis of a study."""

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


AXES_OF = ("grid", "window_ps", "samples", "distances", "max_lag_ps")
"""Ensemble parameters that fix the axes of a study's results, and so belong to all variants."""


class Study(Stage):
    """An experiment, the axis swept and the variants compared. A run is its study.

    With a ``second`` axis every variant is a curve for each of its values: see :attr:`curves`.
    """

    experiment: Experiment = Experiment()
    sweep: Sweep = Sweep()
    second: Sweep | None = Field(
        default=None,
        title="Second sweep",
        description="Another parameter; each variant is computed for each of its values.",
    )
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
        if self.second is not None and self.second.parameter == self.sweep.parameter:
            raise Contradiction(
                "second.parameter", "both sweeps vary the same parameter: choose another"
            )
        if self.experiment.ensemble.grid == "automatic":
            chosen = self.suggestion()
            ensemble = self.experiment.ensemble.model_copy(
                update={"window_ps": chosen.window_ps, "samples": chosen.samples}
            )
            # A study is frozen from here on; what it was made of is now complete.
            object.__setattr__(
                self, "experiment", self.experiment.model_copy(update={"ensemble": ensemble})
            )
        for index, changes in self._corners():
            with _blamed_on(index, self):
                self._share_axes(with_changes(self._chosen, changes))
        return self

    def _corners(self) -> Iterator[tuple[int, dict[str, JsonValue]]]:
        """(variant, changes) at the ends of the sweeps."""
        seconds: list[dict[str, JsonValue]] = [{}]
        if self.second is not None:
            along = self.second.values()
            ends = dict.fromkeys((along[0], along[-1]))
            seconds = [{self.second.parameter: value} for value in ends]
        values = self.sweep.values()
        for index, variant in enumerate(self.variants):
            for second in seconds:
                for value in dict.fromkeys((values[0], values[-1])):
                    yield index, {**variant.changes, **second, self.sweep.parameter: value}

    @property
    def _chosen(self) -> Experiment:
        """The experiment whose grid, chosen for all points together, is given to each of them."""
        ensemble = self.experiment.ensemble.model_copy(update={"grid": "given"})
        return self.experiment.model_copy(update={"ensemble": ensemble})

    def suggestion(self) -> Suggestion:
        """A grid that suits all points; raises Contradiction where none does."""
        corners = []
        for index, changes in self._corners():
            with _blamed_on(index, self):
                corners.append(with_changes(self.experiment, changes))
        return suggest(corners)

    def _share_axes(self, variant: Experiment) -> None:
        for name in AXES_OF:
            if getattr(variant.ensemble, name) != getattr(self._chosen.ensemble, name):
                raise Contradiction(
                    f"ensemble.{name}",
                    f"ensemble.{name} sets an axis that all variants share: change it in the "
                    "experiment",
                )
        if variant.receiver.sampling_gsps != self.experiment.receiver.sampling_gsps:
            raise Contradiction(
                "receiver.sampling_gsps",
                "receiver.sampling_gsps sets the axis of lags that all variants share: change it "
                "in the experiment",
            )

    @property
    def curves(self) -> tuple[Variant, ...]:
        """One for each variant, or for each variant and value of the second axis.

        Curve ``variant · n + j`` is the variant at value j of the n of the second axis.
        """
        if self.second is None:
            return self.variants
        title, unit = title_and_unit(self.second.parameter)
        made = []
        for variant in self.variants:
            for value in self.second.values():
                at = f"{title} {value:.4g} {unit}".rstrip()
                name = f"{variant.name[: 78 - len(at)]}, {at}" if len(self.variants) > 1 else at
                changes = {**variant.changes, self.second.parameter: value}
                made.append(Variant(name=name, changes=changes))
        return tuple(made)

    @property
    def seconds(self) -> int:
        """Values of the second axis; 1 without one."""
        return 1 if self.second is None else self.second.points

    @property
    def points_total(self) -> int:
        """Points of all curves."""
        return len(self.variants) * self.seconds * self.sweep.points

    def experiment_at(self, curve: int, point: int) -> Experiment:
        """The experiment of one point of one curve."""
        variant, at = divmod(curve, self.seconds)
        changes = dict(self.variants[variant].changes)
        if self.second is not None:
            changes[self.second.parameter] = self.second.values()[at]
        return with_changes(
            self._chosen, {**changes, self.sweep.parameter: self.sweep.values()[point]}
        )

    def first_of(self, curve: int) -> int:
        """The curve that a curve is compared with: the first variant at the same second value."""
        return curve % self.seconds

    @property
    def identity(self) -> str:
        """Hash of the whole study, seed included, and of the numerics: 16 hexadecimal digits."""
        study = self.model_dump(mode="json")
        # Studies that do without what came later keep their identity.
        if study["second"] is None:
            del study["second"]
        if study["experiment"]["ensemble"]["grid"] == "given":
            del study["experiment"]["ensemble"]["grid"]
        canonical = json.dumps(
            {"numerics": NUMERICS, "study": study}, sort_keys=True, separators=(",", ":")
        )
        return hashlib.sha256(canonical.encode()).hexdigest()[:16]


@contextmanager
def _blamed_on(variant: int, study: Study) -> Iterator[None]:
    """Say of what makes a point impossible which part of the study is to be changed."""
    changes = f"variants.{variant}.changes"
    try:
        yield
    except Contradiction as error:
        raise Contradiction(changes, str(error)) from None
    except ValueError as error:
        problem = error.errors()[0] if hasattr(error, "errors") else {}
        place = problem.get("loc", ())
        path = ".".join(str(part) for part in place)
        anywhere = ".".join("*" if isinstance(part, int) else str(part) for part in place)
        where = changes
        if study.sweep.parameter in (path, anywhere):
            where = "sweep"
        elif study.second is not None and study.second.parameter in (path, anywhere):
            where = "second"
        said = str(problem.get("msg", error)).removeprefix("Value error, ")
        raise Contradiction(where, f"{path or 'experiment'}: {said}") from None
