"""What a study has found, and the file that keeps it.

The file is HDF5 and describes itself: the study as JSON in an attribute, axes with their units,
``surface`` with C12(0) over all that was varied, and under ``variants/V``, V counting the curves,
every estimate as a pair ``value``, ``standard_error``, with one row for
each point that has been computed: ``point`` says which ones. Rows of points whose ``outcome`` is
not ``completed`` hold no numbers. Nothing is compressed: that would take longer than all else.
"""

import csv
import io
import json
import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from solver.budget import GridUse
from solver.experiment import NUMERICS, Study, Sweep, title_and_unit
from solver.findings import SCALE_UNITS, Invariants, LinearRegime, Picture, Scales
from solver.grid import Real
from solver.pairing import Difference
from solver.point import PointResult
from solver.statistics import ESTIMATES, ORDER, Estimate, Layout
from solver.view import number, numbers

__all__ = [
    "Axes",
    "PointResult",
    "StudyResult",
    "along_csv",
    "curves_csv",
    "read_result",
    "write_result",
]

MAP_ROWS = 64
"""Distances of an evolution map, the launch not counted."""
MAP_COLUMNS = 1024
FORMAT = "crossdip result 3"


@dataclass(frozen=True)
class Axes:
    """Axes of every estimate of a study.

    Distances are those of the experiment as given; a point with a line of another length has
    the same parts of its own ``length_km``.
    """

    study: Study

    def named(self) -> dict[str, tuple[Real, str]]:
        """Axis values and unit, by name."""
        experiment = self.study.experiment
        layout = Layout.of(experiment.ensemble, experiment.receiver)
        ensemble = self.study.experiment.ensemble
        length = self.study.experiment.length_km
        columns = min(MAP_COLUMNS, ensemble.samples)
        return {
            "distance_km": (np.linspace(0.0, length, layout.distances), "km"),
            "lag_ps": (layout.lag_ps, "ps"),
            "offset_ghz": (layout.offset_ghz, "GHz"),
            "contrast": (layout.contrast, "1"),
            "duration_ps": (layout.duration_ps, "ps"),
            "sphere_s3": (layout.sphere_s3, "1"),
            "sphere_azimuth_deg": (layout.sphere_azimuth_deg, "°"),
            "relative_intensity": (layout.relative_intensity, "1"),
            "quadrature": (layout.quadrature, "1"),
            "map_distance_km": (np.linspace(0.0, length, MAP_ROWS + 1), "km"),
            "map_time_ps": (np.arange(columns) * ensemble.window_ps / columns, "ps"),
        }

    def sweep(self) -> dict[str, Any]:
        """The swept parameter: path, title, unit and values; JSON-able."""
        return _swept(self.study.sweep)

    def second(self) -> dict[str, Any] | None:
        """The parameter of the second sweep, where there is one; JSON-able."""
        return None if self.study.second is None else _swept(self.study.second)

    def to_json(self) -> dict[str, Any]:
        """All axes; JSON-able."""
        axes: dict[str, Any] = {name: numbers(v) for name, (v, _) in self.named().items()}
        axes["map"] = {
            "distance_km": axes.pop("map_distance_km"),
            "time_ps": axes.pop("map_time_ps"),
        }
        return {"sweep": self.sweep(), "second": self.second(), **axes}


def _swept(sweep: Sweep) -> dict[str, Any]:
    title, unit = title_and_unit(sweep.parameter)
    return {
        "parameter": sweep.parameter,
        "title": title,
        "unit": unit,
        "values": sweep.values(),
    }


@dataclass(frozen=True)
class StudyResult:
    """A study and what has been found of each point, points[curve][point].

    Curves are those of :attr:`solver.experiment.Study.curves`: the variants, where there is no
    second axis.
    """

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

    def surface(self) -> Estimate:
        """C12(0) over everything that was varied, nan where nothing has been found.

        Shape (variants, values of the second axis or 1, points of the sweep, distances).
        """
        study = self.study
        distances = study.experiment.ensemble.distances + 1
        found = np.full((2, len(study.curves), study.sweep.points, distances), np.nan)
        for point in self.found():
            if point.estimates:
                found[:, point.variant, point.point] = point.estimates["distance"]
        shape = (2, len(study.variants), study.seconds, study.sweep.points, distances)
        return Estimate(*found.reshape(shape))


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
    for name, swept in (("sweep", result.axes.sweep()), ("second", result.axes.second())):
        if swept is not None:
            made = axes.create_dataset(name, data=swept["values"])
            made.attrs.update({name: swept[name] for name in ("parameter", "title", "unit")})
    for name, values in result.surface()._asdict().items():
        made = file.create_dataset(f"surface/{name}", data=values)
        made.attrs.update({"unit": "1", "axes": "variant, second, sweep, distance_km"})
    for index, curve in enumerate(study.curves):
        group = file.create_group(f"variants/{index}")
        group.attrs.update({"name": curve.name, "changes": json.dumps(curve.changes)})
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
    "layer 0: contrast S1/S0 = level/127.5 - 1; layers 1, 2: power of component 1, 2 in W = "
    "level * intensity_scale_w; layers 3, 4: S2/S0, S3/S0 = level/127.5 - 1"
)


def _quantities(point: PointResult) -> Iterator[tuple[str, Any, str]]:
    """Name in the file, value and unit of every number that was found of a point."""
    for name, estimate in point.estimates.items():
        for part, values in estimate._asdict().items():
            yield f"{name}/{part}", values, ESTIMATES[name]
    for name, found in (
        ("linear_regime", point.linear),
        ("difference_from_first", point.difference),
        ("invariants", point.invariants),
        ("scales", point.scales),
        ("grid_use", point.use),
    ):
        for part, values in vars(found).items() if found is not None else ():
            if not isinstance(values, str):
                yield f"{name}/{part}", values, SCALE_UNITS.get(part, "1")
    if point.picture is not None:
        yield "intensity_scale_w", point.picture.intensity_scale_w, "W"


def _fill_variant(group: h5py.Group, points: Sequence[PointResult]) -> None:
    for name in _SCALARS:
        group.create_dataset(name, data=_column([getattr(point, name) for point in points]))
    notes = [point.invariants.note if point.invariants else "" for point in points]
    group.create_dataset("invariants_note", data=_column(notes))
    units: dict[str, str] = {}
    stacked: dict[str, Real] = {}
    for row, point in enumerate(points):
        for name, values, unit in _quantities(point):
            if name not in stacked:
                units[name] = unit
                stacked[name] = np.full((len(points), *np.shape(values)), np.nan)
            stacked[name][row] = values
    for name, rows in stacked.items():
        made = group.create_dataset(name, data=rows)
        made.attrs["unit"] = units[name]
        if order := ORDER.get(name.partition("/")[0]):
            made.attrs["order"] = order
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
        for index in range(len(study.curves)):
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
    linear = picture = difference = use = invariants = scales = None
    if _found(stored, "linear_regime/moment_cross"):
        linear = LinearRegime(**_under(stored, "linear_regime"))
    if _found(stored, "difference_from_first/realizations"):
        parts = _under(stored, "difference_from_first")
        difference = Difference(**{**parts, "realizations": round(parts["realizations"])})
    if _found(stored, "scales/coherence_time_ps"):
        scales = Scales(**_under(stored, "scales"))
        note = _plain(stored["invariants_note"])
        invariants = Invariants(**_under(stored, "invariants"), note=note)
    if _found(stored, "grid_use/target"):
        parts = _under(stored, "grid_use")
        whole = {name: round(parts[name]) for name in ("samples_asked", "most")}
        use = GridUse(**{**parts, **whole})
    if _found(stored, "intensity_scale_w"):
        picture = Picture(stored["map"], _plain(stored["intensity_scale_w"]))
    return PointResult(
        variant=variant,
        **scalars,
        estimates=estimates,
        linear=linear,
        difference=difference,
        use=use,
        picture=picture,
        invariants=invariants,
        scales=scales,
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
    """C12(0) against the swept parameter, one line for each point of each curve."""
    heads = [
        "central_cross_correlation",
        "standard_error",
        "discretization_error",
        "linear_regime",
        "realizations",
        "target_met",
        "outcome",
        "limited_by",
        "difference_from_first",
        "difference_standard_error",
    ]

    def rows() -> Iterator[list[Any]]:
        for point in result.found():
            row = point.summary()
            yield [
                *_place(result, point),
                *_cells(row, "value", "standard_error", "discretization_error", "linear"),
                row["realizations"],
                "yes" if row["target_met"] else "no",
                row["outcome"],
                row["limited_by"],
                *_cells(row["difference"] or {}, "value", "standard_error"),
            ]

    return _table([*_place_heads(result), *heads], rows())


def along_csv(result: StudyResult) -> str:
    """C12(0) over swept parameters and distance, one line for each distance of each point."""
    heads = ["distance [km]", "central_cross_correlation", "standard_error"]
    parts = np.linspace(0.0, 1.0, result.study.experiment.ensemble.distances + 1)

    def rows() -> Iterator[list[Any]]:
        for point in result.found():
            if not point.estimates:
                continue
            here = point.estimates["distance"]
            for share, value, error in zip(
                parts, numbers(here.value), numbers(here.standard_error), strict=True
            ):
                z_km = number(share * point.length_km)
                pair = {"value": value, "standard_error": error}
                yield [*_place(result, point), z_km, *_cells(pair, "value", "standard_error")]

    return _table([*_place_heads(result), *heads], rows())


def _table(heads: Sequence[str], rows: Iterator[list[Any]]) -> str:
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(heads)
    writer.writerows(rows)
    return out.getvalue()


def _place_heads(result: StudyResult) -> list[str]:
    axes = [result.axes.second(), result.axes.sweep()]
    return ["variant", *(f"{a['parameter']} [{a['unit'] or '1'}]" for a in axes if a is not None)]


def _place(result: StudyResult, point: PointResult) -> list[Any]:
    """Variant and swept values of a point, for a table."""
    study = result.study
    variant, at = divmod(point.variant, study.seconds)
    second = [] if study.second is None else [study.second.values()[at]]
    return [study.variants[variant].name, *second, study.sweep.values()[point.point]]


def _cells(row: Mapping[str, Any], *names: str) -> list[Any]:
    """Values of a row for a table, empty where there is none."""
    return ["" if row.get(name) is None else row[name] for name in names]
