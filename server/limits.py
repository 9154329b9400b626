"""What this server was started for: larger studies are refused before anything is built."""

from typing import Any

from server.errors import OverLimit
from server.settings import Settings
from solver.experiment import Study


def _within(value: Any, limit: int, where: str, noun: str, flag: str) -> None:
    if isinstance(value, int | float) and not isinstance(value, bool) and value > limit:
        raise OverLimit(
            f"{_grouped(value)} {noun} are more than this server allows, {_grouped(limit)}: use "
            f"at most {_grouped(limit)}, or start the server with a larger --{flag}",
            where,
        )


def _grouped(number: float) -> str:
    return f"{number:,.10g}".replace(",", "\N{NARROW NO-BREAK SPACE}")


def refuse_oversize(body: object, settings: Settings) -> None:
    """Check the sizes in a raw study, whatever else may be wrong with it; raises OverLimit."""
    if not isinstance(body, dict):
        return
    experiment = body.get("experiment")
    ensemble = experiment.get("ensemble") if isinstance(experiment, dict) else None
    if isinstance(ensemble, dict):
        _check_ensemble(ensemble, "experiment.ensemble", settings)
    variants = body.get("variants")
    count = len(variants) if isinstance(variants, list) else len(Study().variants)
    for index, variant in enumerate(variants[:100] if isinstance(variants, list) else ()):
        changes = variant.get("changes") if isinstance(variant, dict) else None
        if isinstance(changes, dict):
            changed = {
                path.removeprefix("ensemble."): value
                for path, value in changes.items()
                if path.startswith("ensemble.")
            }
            _check_ensemble(changed, f"variants.{index}.changes", settings)
    sweep = body.get("sweep")
    points = sweep.get("points") if isinstance(sweep, dict) else None
    if isinstance(points, int | float) and not isinstance(points, bool):
        _within(
            points * max(count, 1), settings.max_points, "sweep.points",
            "points (variants × sweep points)", "max-points",
        )  # fmt: skip


def _check_ensemble(ensemble: dict[str, Any], where: str, settings: Settings) -> None:
    _within(
        ensemble.get("samples"), settings.max_samples, f"{where}.samples", "samples", "max-samples"
    )
    for name in ("max_realizations", "min_realizations"):
        _within(
            ensemble.get(name), settings.max_realizations, f"{where}.{name}",
            "realizations a point", "max-realizations",
        )  # fmt: skip


def check_study(study: Study, settings: Settings) -> None:
    """The same limits on a validated study, defaults included; raises OverLimit."""
    refuse_oversize(study.model_dump(mode="json"), settings)
