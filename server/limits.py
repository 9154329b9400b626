"""What this server was started for: larger studies are refused before anything is built."""

from typing import Any, TypeGuard

from server.errors import OverLimit
from server.settings import Settings
from solver.experiment import Study, Sweep


def _within(value: Any, limit: int, where: str, noun: str, flag: str) -> None:
    if _is_number(value) and value > limit:
        raise OverLimit(
            f"{_grouped(value)} {noun} are more than this server allows, {_grouped(limit)}: use "
            f"at most {_grouped(limit)}, or start the server with a larger --{flag}",
            where,
        )


def _is_number(value: object) -> TypeGuard[float]:
    return isinstance(value, int | float) and not isinstance(value, bool)


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
    usual = Sweep().points
    sweep, second = body.get("sweep"), body.get("second")
    points = sweep.get("points", usual) if isinstance(sweep, dict) else usual
    seconds = second.get("points", usual) if isinstance(second, dict) else 1
    if _is_number(points) and _is_number(seconds):
        _within(
            points * seconds * max(count, 1), settings.max_points, "sweep.points",
            "points (variants × points of both sweeps)", "max-points",
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
