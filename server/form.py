"""The page's form, derived from the one definition of the parameters.

Nothing about a parameter stands here that ``solver.experiment`` already says; this module only
turns its models into the sections and entries that the templates draw.
"""

import types
from dataclasses import dataclass, field
from functools import cache
from typing import Any, Literal, Union, get_args, get_origin

import annotated_types
from pydantic.fields import FieldInfo

from solver.experiment import (
    Ensemble,
    Experiment,
    Launch,
    Receiver,
    Relation,
    Source,
    Span,
    Stage,
    Study,
    Sweep,
    numeric_parameters,
)

EntryKind = Literal["number", "integer", "choice", "text"]

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
}


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


def _section(key: str, prefix: str, model: type[Stage]) -> Section:
    return Section(
        key=key,
        title=key.capitalize(),
        help=(model.__doc__ or "").strip().splitlines()[0],
        entries=[_entry(prefix, name, info) for name, info in model.model_fields.items()],
    )


@cache
def sections() -> list[Section]:
    """The form's sections in the order in which the light meets them, then the sweep.

    The entries of the line stand for one span; their paths hold ``__n__`` for its number.
    """
    return [
        _section("source", "experiment.source", Source),
        _section("relation", "experiment.relation", Relation),
        _section("launch", "experiment.launch", Launch),
        _section("line", "experiment.line.__n__", Span),
        _section("receiver", "experiment.receiver", Receiver),
        _section("ensemble", "experiment.ensemble", Ensemble),
        _section("sweep", "sweep", Sweep),
    ]


@cache
def page_data() -> dict[str, Any]:
    """What the form's script needs: the default study and the parameters a sweep may run over."""
    entries = {entry.path: entry for section in sections() for entry in section.entries}
    parameters = []
    for path, title, unit in numeric_parameters():
        entry = entries["experiment." + path.replace("*", "__n__")]
        parameters.append(
            {
                "path": path,
                "title": title,
                "unit": unit,
                "low": entry.low,
                "high": entry.high,
            }
        )
    return {
        "defaults": Study().model_dump(mode="json"),
        "span": Experiment().line[0].model_dump(mode="json"),
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
