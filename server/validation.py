"""Validation errors in a person's words: the field, its allowed range, what was given."""

import difflib
import json
import types
import typing
from collections.abc import Sequence
from typing import Any

from pydantic import BaseModel
from pydantic.fields import FieldInfo

from server.errors import BadRequest, OutOfRange, ServerError
from solver.experiment import Contradiction

Location = Sequence[str | int]

_CODES = {
    "missing": "missing",
    "extra_forbidden": "unknown_parameter",
    "json_invalid": "malformed_json",
}
_NUMBER_PROBLEMS = ("greater_than", "less_than", "finite_number", "float_", "int_")


def first_problem(errors: Sequence[Any], root: type[BaseModel] | None) -> ServerError:
    """The error to show for a list of pydantic's, ``root`` being the model of the body."""
    problem = errors[0]
    kind = str(problem["type"])
    location = [part for part in problem["loc"] if part != "body"]
    if kind == "json_invalid":
        reason = problem.get("ctx", {}).get("error", "")
        error: ServerError = BadRequest(
            f"the body is not JSON: {reason} near character {problem['loc'][-1]}; mend it there"
        )
        error.code = _CODES[kind]
        return error
    cause = problem.get("ctx", {}).get("error")
    where = ".".join(str(part) for part in location)
    if isinstance(cause, Contradiction):
        error = OutOfRange(str(cause), ".".join(part for part in (where, cause.where) if part))
        error.code = "contradiction"
        return error
    error = OutOfRange(_message(problem, kind, location, root), where)
    error.code = _CODES.get(kind, _code(kind))
    return error


def _code(kind: str) -> str:
    in_range = kind.startswith(("greater_than", "less_than", "finite_number", "literal"))
    return "out_of_range" if in_range or "too_" in kind else "wrong_type"


def _message(problem: Any, kind: str, location: Location, root: type[BaseModel] | None) -> str:
    found = field_at(root, location) if root is not None else None
    name = str(location[-1]) if location else "the body"
    title = found.title or name if found is not None else name
    allowed = _allowed(found) if found is not None else ""
    if kind == "missing":
        return f"{title} is missing" + (f": give {allowed}" if allowed else "")
    if kind == "extra_forbidden":
        return _unknown(name, location, root)
    given = _shown(problem.get("input"))
    if allowed and (kind.startswith(_NUMBER_PROBLEMS) or kind == "literal_error"):
        return f"{title} must be {allowed}, not {given}"
    text = str(problem["msg"]).removeprefix("Value error, ")
    return f"{title}: {text[:1].lower()}{text[1:]}"


def _shown(value: object) -> str:
    try:
        text = json.dumps(value, ensure_ascii=False)
    except (TypeError, ValueError):
        text = str(value)
    return text if len(text) <= 60 else text[:57] + "…"


def _unknown(name: str, location: Location, root: type[BaseModel] | None) -> str:
    parent = _model_at(root, location[:-1]) if root is not None else None
    known = list(parent.model_fields) if parent is not None else []
    near = difflib.get_close_matches(name, known, 1, 0.5)
    hint = f"did you mean {near[0]}?" if near else f"known: {', '.join(known)}"
    return f"{name[:60]} is not a parameter here; {hint}" if known else f"{name[:60]} is unknown"


def _allowed(field: FieldInfo) -> str:
    """The allowed range or choices of a field, with its unit."""
    choices = [choice for option in _options(field.annotation) for choice in _literals(option)]
    if choices:
        return "one of " + ", ".join(str(choice) for choice in choices)
    bounds: dict[str, Any] = {}
    for constraint in field.metadata:
        for name in ("ge", "gt", "le", "lt"):
            if getattr(constraint, name, None) is not None:
                bounds[name] = getattr(constraint, name)
    low, high = bounds.get("ge", bounds.get("gt")), bounds.get("le", bounds.get("lt"))
    extra = field.json_schema_extra
    unit = f" {extra.get('unit', '')}".rstrip() if isinstance(extra, dict) else ""
    noun = "a whole number" if int in _options(field.annotation) else "a number"
    if low is not None and high is not None:
        return f"{noun} from {low:g} to {high:g}{unit}"
    numeric = {int, float} & set(_options(field.annotation))
    return f"{noun}{unit and f' in{unit}'}" if numeric else ""


def _literals(annotation: Any) -> tuple[Any, ...]:
    return typing.get_args(annotation) if typing.get_origin(annotation) is typing.Literal else ()


def _options(annotation: Any) -> list[Any]:
    """The members of a union, Annotated stripped."""
    if typing.get_origin(annotation) is typing.Annotated:
        return _options(typing.get_args(annotation)[0])
    if typing.get_origin(annotation) in (typing.Union, types.UnionType):
        return [part for option in typing.get_args(annotation) for part in _options(option)]
    return [annotation]


def _step(annotation: Any, part: str | int) -> tuple[Any, FieldInfo | None]:
    """Follow one part of a location into a type."""
    for option in _options(annotation):
        if isinstance(option, type) and issubclass(option, BaseModel):
            field = option.model_fields.get(str(part))
            if field is not None:
                return field.annotation, field
        elif typing.get_origin(option) in (tuple, list) and isinstance(part, int):
            return typing.get_args(option)[0], None
    return None, None


def field_at(root: Any, location: Location) -> FieldInfo | None:
    """The definition of the parameter at a place in a model; None when there is none."""
    annotation, field = root, None
    for part in location:
        annotation, field = _step(annotation, part)
    return field


def _model_at(root: Any, location: Location) -> type[BaseModel] | None:
    annotation = root
    for part in location:
        annotation, _ = _step(annotation, part)
    for option in _options(annotation):
        if isinstance(option, type) and issubclass(option, BaseModel):
            return option
    return None
