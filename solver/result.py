"""What a study has found, and the file that keeps it.

The file is HDF5 and describes itself: the study as JSON in an attribute, axes with their units,
and under ``variants/V`` every estimate as a pair ``value``, ``standard_error``, with one row for
each point that has been computed: ``point`` says which ones. Rows of points whose ``outcome`` is
not ``completed`` hold no numbers. Nothing is compressed: that would take longer than all else.
"""

import csv
import io
import json
import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from solver.experiment import NUMERICS, Study, numeric_parameters
from solver.grid import Real
from solver.pairing import Difference
from solver.statistics import CORRELATIONS, ESTIMATES, SPECTRA, Estimate, Layout

MAP_ROWS = 64
"""Distances of an evolution map, the launch not counted."""
MAP_COLUMNS = 1024
FORMAT = "crossdip result 2"


@dataclass(frozen=True)
class Picture:
    """Evolution map of one realization, as 8-bit levels.

    data: uint8, shape (3, rows, columns): contrast from −1 (0) to 1 (255), then the power of
    components 1 and 2 in the fibre, in steps of intensity_scale_w.
    """

    data: np.ndarray
    intensity_scale_w: float


@dataclass(frozen=True)
class LinearRegime:
    """Closed forms with the Kerr term off, on the signed lag axis.

    launched: C12(0) at the launch.
    """

    auto1: Real
    auto2: Real
    sum: Real
    cross: Real
    moment_cross: float
    launched: float


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
    picture: Picture | None = None

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
            "value": central and _number(central[0]),
            "standard_error": central and _number(central[1]),
            "discretization_error": central and _number(self.discretization_error),
            "linear": linear and _number(linear.cross[len(linear.cross) // 2]),
            "difference": self._difference(),
            "along": central and _pair(self.estimates["distance"]),
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
        return {name: _number(value) for name, value in vars(self.difference).items()}

    def detail(self) -> dict[str, Any]:
        """Everything but the map; JSON-able."""
        found = self.estimates
        if not found:
            return {"summary": self.summary()}
        powers = [_number(x) for x in found["powers"].value]
        names = ("launched_1_w", "launched_2_w", "received_1_w", "received_2_w")
        correlations = {name: _pair(found[name]) for name in CORRELATIONS}
        if self.linear is not None:
            for name, curve in correlations.items():
                curve["linear"] = _numbers(getattr(self.linear, name))
        return {
            "summary": self.summary(),
            "distance": _pair(found["distance"]),
            "correlations": correlations,
            "moment_cross": _single(found["moment_cross"]),
            "spectra": {name: _pair(found[name]) for name in SPECTRA},
            "contrast": _density(found["contrast"]),
            "durations": _density(found["durations"]),
            "walls_per_ns": _single(found["walls_per_ns"]),
            "mean_duration_ps": _single(found["mean_duration_ps"]),
            "energy": dict(zip(names, powers, strict=True)),
            "steps": self.steps,
            "transforms": self.transforms,
            "samples": self.samples,
        }


def _numbers(values: Real) -> list[float | None]:
    """Floats that JSON can carry, to 7 significant digits; None where not finite."""
    finite = np.isfinite(values)
    plain = np.where(finite, values, 0.0)
    size = np.abs(plain)
    # Dividing by a power of ten, or multiplying, whichever is a whole number: both print short.
    digits = 6 - np.floor(np.log10(np.where(size > 0.0, size, 1.0)))
    up, down = 10.0 ** np.maximum(digits, 0.0), 10.0 ** np.maximum(-digits, 0.0)
    short = np.rint(plain * up / down) * down / up
    return [x if ok else None for x, ok in zip(short.tolist(), finite.tolist(), strict=True)]


def _number(value: float) -> float | None:
    return _numbers(np.array([value]))[0]


def _pair(estimate: Estimate) -> dict[str, list[float | None]]:
    return {
        "value": _numbers(estimate.value),
        "standard_error": _numbers(estimate.standard_error),
    }


def _density(estimate: Estimate) -> dict[str, list[float | None]]:
    return {
        "density": _numbers(estimate.value),
        "standard_error": _numbers(estimate.standard_error),
    }


def _single(estimate: Estimate) -> dict[str, float | None]:
    return {
        "value": _number(estimate.value[0]),
        "standard_error": _number(estimate.standard_error[0]),
    }


@dataclass(frozen=True)
class Axes:
    """Axes of every estimate of a study.

    Distances are those of the experiment as given; a point with a line of another length has
    the same parts of its own ``length_km``.
    """

    study: Study

    def named(self) -> dict[str, tuple[Real, str]]:
        """Axis values and unit, by name."""
        layout = Layout.of(self.study.experiment.ensemble)
        ensemble = self.study.experiment.ensemble
        length = self.study.experiment.length_km
        columns = min(MAP_COLUMNS, ensemble.samples)
        return {
            "distance_km": (np.linspace(0.0, length, layout.distances), "km"),
            "lag_ps": (layout.lag_ps, "ps"),
            "offset_ghz": (layout.offset_ghz, "GHz"),
            "contrast": (layout.contrast, "1"),
            "duration_ps": (layout.duration_ps, "ps"),
            "map_distance_km": (np.linspace(0.0, length, MAP_ROWS + 1), "km"),
            "map_time_ps": ((np.arange(columns) + 0.5) * ensemble.window_ps / columns, "ps"),
        }

    def sweep(self) -> dict[str, Any]:
        """The swept parameter: path, title, unit and values; JSON-able."""
        sweep = self.study.sweep
        title, unit = next((t, u) for p, t, u in numeric_parameters() if p == sweep.parameter)
        return {
            "parameter": sweep.parameter,
            "title": title,
            "unit": unit,
            "values": sweep.values(),
        }

    def to_json(self) -> dict[str, Any]:
        """All axes; JSON-able."""
        axes: dict[str, Any] = {name: _numbers(v) for name, (v, _) in self.named().items()}
        axes["map"] = {
            "distance_km": axes.pop("map_distance_km"),
            "time_ps": axes.pop("map_time_ps"),
        }
        return {"sweep": self.sweep(), **axes}


@dataclass(frozen=True)
class StudyResult:
    """A study and what has been found of each point, points[variant][point]."""

    study: Study
    points: list[list[PointResult | None]]

    @property
    def axes(self) -> Axes:
        """The axes of this study."""
        return Axes(self.study)

    def found(self) -> Iterator[PointResult]:
        """The points that have something."""
        for row in self.points:
            yield from (point for point in row if point is not None)


def write_result(path: Path, result: StudyResult, *, title: str, created: str) -> None:
    """Write the result file: temporary name beside it, flushed to the disk, then renamed.

    Raises OSError when the disk refuses; nothing half-written is left under either name.
    """
    draft = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with h5py.File(draft, "w", track_order=True) as file:
            _fill(file, result, title, created)
        with draft.open("rb+") as handle:
            os.fsync(handle.fileno())
        draft.replace(path)
    finally:
        draft.unlink(missing_ok=True)


def _fill(file: h5py.File, result: StudyResult, title: str, created: str) -> None:
    study = result.study
    file.attrs.update(
        {
            "format": FORMAT,
            "title": title,
            "created": created,
            "identity": study.identity,
            "numerics": NUMERICS,
            "study": study.model_dump_json(),
        }
    )
    axes = file.create_group("axes")
    for name, (values, unit) in result.axes.named().items():
        axes.create_dataset(name, data=values).attrs["unit"] = unit
    sweep = result.axes.sweep()
    made = axes.create_dataset("sweep", data=sweep["values"])
    made.attrs.update({name: sweep[name] for name in ("parameter", "title", "unit")})
    for index, variant in enumerate(study.variants):
        group = file.create_group(f"variants/{index}")
        group.attrs.update({"name": variant.name, "changes": json.dumps(variant.changes)})
        _fill_variant(group, [point for point in result.points[index] if point is not None])


_SCALARS = (
    "point",
    "realizations",
    "target_met",
    "final",
    "outcome",
    "advice",
    "discretization_error",
    "steps",
    "transforms",
    "samples",
    "length_km",
)


_LEVELS = (
    "layer 0: contrast = level/127.5 - 1; layers 1, 2: power of component 1, 2 in W = "
    "level * intensity_scale_w"
)


def _quantities(point: PointResult) -> Iterator[tuple[str, Any, str]]:
    """Name in the file, value and unit of every number that was found of a point."""
    for name, estimate in point.estimates.items():
        for part, values in estimate._asdict().items():
            yield f"{name}/{part}", values, ESTIMATES[name]
    for name, found in (
        ("linear_regime", point.linear),
        ("difference_from_first", point.difference),
    ):
        if found is not None:
            for part, values in vars(found).items():
                yield f"{name}/{part}", values, "1"
    if point.picture is not None:
        yield "intensity_scale_w", point.picture.intensity_scale_w, "W"


def _fill_variant(group: h5py.Group, points: Sequence[PointResult]) -> None:
    for name in _SCALARS:
        group.create_dataset(name, data=_column([getattr(point, name) for point in points]))
    units: dict[str, str] = {}
    stacked: dict[str, Real] = {}
    for row, point in enumerate(points):
        for name, values, unit in _quantities(point):
            if name not in stacked:
                units[name] = unit
                stacked[name] = np.full((len(points), *np.shape(values)), np.nan)
            stacked[name][row] = values
    for name, rows in stacked.items():
        group.create_dataset(name, data=rows).attrs["unit"] = units[name]
    shown = {row: point.picture for row, point in enumerate(points) if point.picture is not None}
    if shown:
        shape = next(iter(shown.values())).data.shape
        maps = group.create_dataset("map", (len(points), *shape), np.uint8)
        maps.attrs["levels"] = _LEVELS
        for row, picture in shown.items():
            maps[row] = picture.data


def _column(values: Sequence[Any]) -> np.ndarray:
    if values and isinstance(values[0], str):
        texts = [value.encode() for value in values]
        return np.array(texts, h5py.string_dtype("utf-8", max(1, *map(len, texts))))
    return np.array(values)


def read_result(path: Path) -> StudyResult:
    """Read a result file.

    Raises OSError when it cannot be read, ValueError when it is not a result of this format.
    """
    with h5py.File(path, "r") as file:
        if file.attrs.get("format") != FORMAT:
            raise ValueError(f"{path.name} is not a result file of format {FORMAT!r}")
        study = Study.model_validate_json(str(file.attrs["study"]))
        points: list[list[PointResult | None]] = []
        for index in range(len(study.variants)):
            group = file[f"variants/{index}"]
            row: list[PointResult | None] = [None] * study.sweep.points
            for found in _read_variant(index, group):
                row[found.point] = found
            points.append(row)
    return StudyResult(study, points)


def _read_variant(variant: int, group: h5py.Group) -> Iterator[PointResult]:
    columns: dict[str, np.ndarray] = {}

    def read(name: str, item: h5py.Group | h5py.Dataset) -> None:
        if isinstance(item, h5py.Dataset):
            columns[name] = item[()]

    group.visititems(read)
    for row in range(len(columns["point"])):
        yield _read_point(variant, {name: column[row] for name, column in columns.items()})


def _read_point(variant: int, stored: Mapping[str, Any]) -> PointResult:
    scalars = {name: _plain(stored[name]) for name in _SCALARS}
    estimates = {}
    if scalars["outcome"] == "completed":
        estimates = {
            name: Estimate(stored[f"{name}/value"], stored[f"{name}/standard_error"])
            for name in ESTIMATES
            if f"{name}/value" in stored
        }
    linear = picture = difference = None
    if _found(stored, "linear_regime/moment_cross"):
        linear = LinearRegime(**_under(stored, "linear_regime"))
    if _found(stored, "difference_from_first/realizations"):
        parts = _under(stored, "difference_from_first")
        difference = Difference(**{**parts, "realizations": round(parts["realizations"])})
    if _found(stored, "intensity_scale_w"):
        picture = Picture(stored["map"], _plain(stored["intensity_scale_w"]))
    return PointResult(
        variant=variant,
        **scalars,
        estimates=estimates,
        linear=linear,
        difference=difference,
        picture=picture,
    )


def _found(stored: Mapping[str, Any], name: str) -> bool:
    return name in stored and bool(np.isfinite(stored[name]))


def _under(stored: Mapping[str, Any], name: str) -> dict[str, Any]:
    prefix = f"{name}/"
    return {k.removeprefix(prefix): _plain(v) for k, v in stored.items() if k.startswith(prefix)}


def _plain(value: Any) -> Any:
    """A row as it was before it was written: an array, or a number or text of Python's."""
    if isinstance(value, bytes):
        return value.decode()
    return value if np.ndim(value) else value.item()


def curves_csv(result: StudyResult) -> str:
    """C12(0) against the swept parameter, one line for each point of each variant."""
    sweep = result.axes.sweep()
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    swept = f"{sweep['parameter']} [{sweep['unit'] or '1'}]"
    writer.writerow(
        [
            "variant",
            swept,
            "central_cross_correlation",
            "standard_error",
            "discretization_error",
            "linear_regime",
            "realizations",
            "target_met",
            "outcome",
            "difference_from_first",
            "difference_standard_error",
        ]
    )
    for point in result.found():
        row = point.summary()
        writer.writerow(
            [
                result.study.variants[point.variant].name,
                sweep["values"][point.point],
                *_cells(row, "value", "standard_error", "discretization_error", "linear"),
                row["realizations"],
                "yes" if row["target_met"] else "no",
                row["outcome"],
                *_cells(row["difference"] or {}, "value", "standard_error"),
            ]
        )
    return out.getvalue()


def _cells(row: Mapping[str, Any], *names: str) -> list[Any]:
    """Values of a row for a table, empty where there is none."""
    return ["" if row.get(name) is None else row[name] for name in names]
