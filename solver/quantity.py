"""What a parameter is: a name, a unit, bounds, a default and a help text, said once."""

from typing import Any

from pydantic import BaseModel, ConfigDict, Field, JsonValue


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
