"""The page's form, derived from the one definition of the parameters.

Nothing about a parameter stands here that ``solver.experiment`` already says; this module only
turns its models into the sections and entries that the templates draw.
"""

import types
from dataclasses import dataclass, field, replace
from functools import cache
from typing import Any, Literal, Union, get_args, get_origin

import annotated_types
from pydantic.fields import FieldInfo

from solver.columns import Strays
from solver.experiment import (
    Experiment,
    MeasuredSpectrum,
    Span,
    Stage,
    Study,
    Sweep,
    numeric_parameters,
)
from solver.legend import AxisUnit, LevelUnit, Per
from solver.measured import Gaps, Negative

EntryKind = Literal["number", "integer", "choice", "text", "spectrum"]

POWER_PATH = "launch.total_power_mw"
"""The one parameter that may be typed in dBm as well."""

ALTERNATIVES = {
    "dispersion_ps_per_nm_km": "beta2_ps2_per_km",
    "beta2_ps2_per_km": "dispersion_ps_per_nm_km",
}
"""Parameters of which exactly one is given: filling one empties the other."""

CHOICE_LABELS = {
    "gaussian": "Gaussian",
    "super_gaussian": "super-Gaussian",
    "sech2": "sech²",
    "hilbert": "Hilbert",
    "manakov": "Manakov",
    "bessel4": "Bessel, 4th order",
    "butterworth4": "Butterworth, 4th order",
    "log": "logarithmic",
    "auto": "as the file says",
    "um": "µm",
    "zero": "as zero",
}

SWITCHED = ("shaper", "booster", "preamplifier")
"""Stages that may be absent altogether."""


@dataclass(frozen=True)
class Entry:
    """One parameter as the form shows it; ``path`` is its place in a study."""

    path: str
    title: str
    help: str
    unit: str
    kind: EntryKind
    low: float | None
    high: float | None
    default: Any
    optional: bool
    choices: list[tuple[str, str]] = field(default_factory=list)
    when: dict[str, list[str]] = field(default_factory=dict)
    power: bool = False
    alternative: str = ""
    rare: bool = False

    @property
    def switched(self) -> bool:
        """Whether the default takes the effect away, so that a value switches it on."""
        if self.kind != "number" or self.alternative:
            return False
        return self.optional or self.default == 0.0

    @property
    def key(self) -> str:
        """The path as an identifier of the document."""
        return self.path.replace(".", "-")

    @property
    def bounds(self) -> str:
        """The allowed range in words, empty when there is none."""
        if self.low is not None and self.high is not None:
            return f"{_number(self.low)} to {_number(self.high)}"
        if self.low is not None:
            return f"at least {_number(self.low)}"
        return f"at most {_number(self.high)}" if self.high is not None else ""


@dataclass(frozen=True)
class Section:
    """One stage of the study: a heading and its entries."""

    key: str
    title: str
    help: str
    entries: list[Entry]
    switched: bool = False


def _number(value: float) -> str:
    if value == int(value) and abs(value) <= 1e5:
        return str(int(value)).replace("-", "−")
    return (
        f"{value:g}".replace("e+0", "e").replace("e+", "e").replace("e-0", "e-").replace("-", "−")
    )


def _choice_label(value: str) -> str:
    return CHOICE_LABELS.get(value, value.replace("_", " "))


def _without_none(annotation: Any) -> tuple[Any, bool]:
    if get_origin(annotation) in (Union, types.UnionType):
        members = [part for part in get_args(annotation) if part is not type(None)]
        return members[0], True
    return annotation, False


def _kind(annotation: Any) -> EntryKind:
    if get_origin(annotation) is Literal:
        return "choice"
    if annotation is int:
        return "integer"
    if annotation is MeasuredSpectrum:
        return "spectrum"
    return "number" if annotation is float else "text"


def _bounds(info: FieldInfo) -> tuple[float | None, float | None]:
    low: float | None = None
    high: float | None = None
    for mark in info.metadata:
        if isinstance(mark, annotated_types.Ge):
            low = float(mark.ge)  # type: ignore[arg-type]
        elif isinstance(mark, annotated_types.Le):
            high = float(mark.le)  # type: ignore[arg-type]
    return low, high


def _entry(prefix: str, name: str, info: FieldInfo) -> Entry:
    annotation, optional = _without_none(info.annotation)
    kind = _kind(annotation)
    low, high = _bounds(info)
    extra = info.json_schema_extra if isinstance(info.json_schema_extra, dict) else {}
    when: Any = extra.get("when", {})
    path = f"{prefix}.{name}"
    return Entry(
        path=path,
        title=info.title or name,
        help=info.description or "",
        unit=str(extra.get("unit", "")),
        kind=kind,
        low=low,
        high=high,
        default=None if info.is_required() else info.default,
        optional=optional,
        choices=[(value, _choice_label(value)) for value in get_args(annotation)]
        if kind == "choice"
        else [],
        when=when,
        power=path == f"experiment.{POWER_PATH}",
        alternative=ALTERNATIVES.get(name, ""),
    )


def _section(key: str, prefix: str, model: type[Stage], *, title: str = "") -> Section:
    entries = [_entry(prefix, name, info) for name, info in model.model_fields.items()]
    return Section(
        key=key,
        title=title or key.capitalize(),
        help=(model.__doc__ or "").strip().splitlines()[0],
        entries=[_folded(entry) for entry in entries] if model is Span else entries,
        switched=key in SWITCHED,
    )


def _folded(entry: Entry) -> Entry:
    """An entry of a span, folded away unless most lines need it: those that the default gives."""
    name = entry.path.rpartition(".")[2]
    needed = Experiment().line[0].model_fields_set | {"coupling"}
    rare = not needed & {name, entry.alternative, *entry.when}
    return replace(entry, rare=rare)


@cache
def sections() -> list[Section]:
    """The form's sections in the order in which the light meets them, then the sweeps.

    The entries of the line stand for one span; their paths hold ``__n__`` for its number.
    """
    stages = []
    for name, info in Experiment.model_fields.items():
        prefix, model = f"experiment.{name}", info.annotation
        if name == "line":
            prefix, model = f"{prefix}.__n__", Span
        assert isinstance(model, type)
        stages.append(_section(name, prefix, model))
    return [
        *stages,
        _section("sweep", "sweep", Sweep),
        _section("second", "second", Sweep, title="Second sweep"),
    ]


SPECTRUM_CHOICES = [
    ("axis", "First column", AxisUnit),
    ("level", "Levels", LevelUnit),
    ("per", "Power within a width of", Per),
    ("gaps", "Gaps", Gaps),
    ("negative", "Negative powers", Negative),
    ("strays", "Text among the numbers", Strays),
]


def spectrum_choices() -> list[tuple[str, str, list[tuple[str, str]]]]:
    """(name, title, choices) of what may be said about a spectrum that is imported."""
    return [
        (name, title, [(value, _choice_label(value)) for value in get_args(literal)])
        for name, title, literal in SPECTRUM_CHOICES
    ]


@cache
def page_data() -> dict[str, Any]:
    """What the page's script needs: the default study, every parameter and those to sweep."""
    entries = {entry.path: entry for section in sections() for entry in section.entries}
    swept = {path for path, _, _ in numeric_parameters()}
    parameters = []
    for path, entry in entries.items():
        inside = path.removeprefix("experiment.").replace("__n__", "*")
        if inside == path:
            continue
        parameters.append(
            {
                "path": inside,
                "title": entry.title,
                "unit": entry.unit,
                "low": entry.low,
                "high": entry.high,
                "default": entry.default if entry.kind != "spectrum" else None,
                "when": entry.when,
                "swept": inside in swept,
                "switched": entry.switched,
                "rare": entry.rare,
            }
        )
    return {
        "defaults": Study().model_dump(mode="json"),
        "span": Experiment().line[0].model_dump(mode="json"),
        "second": Sweep(
            parameter="line.*.length_km", start=2.0, stop=8.0, points=4, spacing="linear"
        ).model_dump(mode="json"),
        "parameters": parameters,
        "power_path": POWER_PATH,
    }


def choices_of(path: str) -> list[tuple[str, str]]:
    """(value, label) of a choice entry, by its path; KeyError when there is none."""
    for section in sections():
        for entry in section.entries:
            if entry.path == path:
                return entry.choices
    raise KeyError(path)
