"""What a study would be computed on, before it is asked for."""

from typing import Annotated, Any

from fastapi import APIRouter, Depends, Request
from pydantic import BeforeValidator

from server.dependencies import within_limits
from server.limits import check_study
from server.schemas import Plan, Reason
from solver.experiment import Study

router = APIRouter(prefix="/api/plan", tags=["runs"])


def _left_open(body: Any) -> Any:
    """A study whose grid is to be chosen, whatever grid it came with."""
    if not isinstance(body, dict):
        return body
    experiment = body.get("experiment", {})
    if not isinstance(experiment, dict):
        return body
    ensemble = experiment.get("ensemble", {})
    if not isinstance(ensemble, dict):
        return body
    return {**body, "experiment": {**experiment, "ensemble": {**ensemble, "grid": "automatic"}}}


@router.post("", dependencies=[Depends(within_limits)])
async def plan(study: Annotated[Study, BeforeValidator(_left_open)], request: Request) -> Plan:
    """Window and samples that suit every point of a study, and what asked for them."""
    check_study(study, request.app.state.settings)
    chosen = study.suggestion()
    largest = {unit: max(n.value for n in chosen.needs if n.unit == unit) for unit in ("ps", "GHz")}
    return Plan(
        window_ps=chosen.window_ps,
        samples=chosen.samples,
        time_step_ps=chosen.window_ps / chosen.samples,
        reasons=[
            Reason(
                title=need.title,
                value=float(f"{need.value:.4g}"),
                unit=need.unit,
                decides=need.value == largest[need.unit],
            )
            for need in chosen.needs
        ],
    )
