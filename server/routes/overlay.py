"""Curves of several runs on one set of axes, and where their parameters differ."""

import asyncio
from typing import Annotated, Any

from fastapi import APIRouter, Query
from pydantic import JsonValue

from server.dependencies import TheRuns
from server.errors import NotFound, OutOfRange
from server.runs import Runs
from server.validation import field_at
from solver.experiment import Study, with_changes
from solver.result import StudyResult

router = APIRouter(prefix="/api/overlay", tags=["overlay"])

Flat = dict[str, JsonValue]


@router.get("")
async def overlay(
    runs: TheRuns, curve: Annotated[list[str], Query(min_length=1, max_length=8)]
) -> dict[str, Any]:
    """One to eight curves, each given as RUN:VARIANT."""
    curves: list[dict[str, Any]] = []
    parameters: list[Flat] = []
    for index, choice in enumerate(curve):
        title, result, variant = await _find(runs, choice, f"curve.{index}")
        shown = await asyncio.to_thread(_curve, result, variant)
        run_id = choice.partition(":")[0]
        curves.append({"run": run_id, "variant": variant, "title": title, **shown})
        parameters.append(_parameters(result.study, variant))
    return {"curves": curves, "differences": _differences(parameters)}


async def _find(runs: Runs, choice: str, where: str) -> tuple[str, StudyResult, int]:
    run_id, _, number = choice.partition(":")
    if not (number.isascii() and number.isdigit() and len(number) < 6):
        raise OutOfRange("give each curve as RUN:VARIANT, the variant counted from 0", where)
    try:
        record, result = await runs.open_result(run_id)
    except NotFound as error:
        raise NotFound(error.message, where) from None
    variant = int(number)
    if variant >= len(result.study.curves):
        raise NotFound(f"run {run_id} has variants 0 to {len(result.study.curves) - 1}", where)
    return record.title, result, variant


def _curve(result: StudyResult, variant: int) -> dict[str, Any]:
    return {
        "name": result.study.curves[variant].name,
        "sweep": result.axes.sweep(),
        "points": [None if point is None else point.summary() for point in result.points[variant]],
    }


def _flatten(tree: Any, prefix: str = "") -> Flat:
    if isinstance(tree, dict):
        items = list(tree.items())
    elif isinstance(tree, list):
        items = [(str(index), item) for index, item in enumerate(tree)]
    else:
        return {prefix: tree}
    flat: Flat = {}
    for name, item in items:
        flat |= _flatten(item, f"{prefix}.{name}" if prefix else name)
    return flat


def _parameters(study: Study, variant: int) -> Flat:
    """Every parameter of a curve by path, the swept one left out."""
    experiment = with_changes(study.experiment, study.curves[variant].changes)
    tree = experiment.model_dump(mode="json")
    if experiment.source.measured is not None:
        tree["source"]["measured"] = experiment.source.measured.label
    flat = _flatten(tree, "experiment")
    swept = f"experiment.{study.sweep.parameter}".split(".")
    flat = {path: value for path, value in flat.items() if not _is_at(path.split("."), swept)}
    return flat | _flatten(study.sweep.model_dump(mode="json"), "sweep")


def _is_at(path: list[str], pattern: list[str]) -> bool:
    return len(path) == len(pattern) and all(
        part in ("*", name) for name, part in zip(path, pattern, strict=True)
    )


def _differences(parameters: list[Flat]) -> list[dict[str, Any]]:
    paths = dict.fromkeys(path for flat in parameters for path in flat)
    rows = []
    for path in paths:
        values = [flat.get(path) for flat in parameters]
        if all(value == values[0] for value in values):
            continue
        location = [int(part) if part.isdigit() else part for part in path.split(".")]
        field = field_at(Study, location)
        extra = field.json_schema_extra if field is not None else None
        rows.append(
            {
                "path": path,
                "title": (field.title if field is not None else None) or path,
                "unit": str(extra.get("unit", "")) if isinstance(extra, dict) else "",
                "values": values,
            }
        )
    return rows
