"""Routes of runs: ask for one, follow it, read it, keep house."""

import asyncio
from collections.abc import AsyncIterator
from typing import Annotated, Any

from fastapi import APIRouter, Depends, Header, Query, Request, Response
from fastapi.responses import FileResponse
from fastapi.sse import EventSourceResponse, ServerSentEvent

from server.dependencies import InPath, TheLog, TheRuns, within_limits
from server.errors import NotFound
from server.limits import check_study
from server.schemas import Deleted, NewTitle, RunDetail, RunList, RunRow
from solver.experiment import Study
from solver.result import StudyResult, along_csv, curves_csv

router = APIRouter(prefix="/api/runs", tags=["runs"])

After = Annotated[str, Query(max_length=64, description="Replay what came after this event.")]


@router.post("", status_code=201, dependencies=[Depends(within_limits)])
async def post_run(study: Study, request: Request, response: Response, runs: TheRuns) -> RunRow:
    """Ask for a study: 201 with a new run, 200 with the one that exists."""
    check_study(study, request.app.state.settings)
    row, new = await runs.submit(study)
    response.status_code = 201 if new else 200
    response.headers["Location"] = f"/api/runs/{row.id}"
    return row


@router.get("")
async def list_runs(
    runs: TheRuns,
    search: Annotated[str, Query(max_length=200)] = "",
    limit: Annotated[int, Query(ge=1, le=500)] = 100,
    offset: Annotated[int, Query(ge=0, le=10_000_000)] = 0,
) -> RunList:
    """Runs whose title, identity or study holds every word of the search, newest first."""
    rows, total = await runs.rows(search, limit, offset)
    return RunList(runs=rows, total=total)


@router.get("/{run_id}")
async def get_run(run_id: InPath, runs: TheRuns) -> RunDetail:
    """One run with its study."""
    return await runs.detail(run_id)


@router.patch("/{run_id}")
async def rename_run(run_id: InPath, body: NewTitle, runs: TheRuns) -> RunRow:
    """Change the title."""
    return await runs.rename(run_id, body.title)


@router.post("/{run_id}/cancel")
async def cancel_run(run_id: InPath, runs: TheRuns) -> RunRow:
    """Stop a run; what it has is kept."""
    return await runs.cancel(run_id)


@router.post("/{run_id}/resume")
async def resume_run(run_id: InPath, runs: TheRuns) -> RunRow:
    """Continue a cancelled or failed run from what it has."""
    return await runs.resume(run_id)


@router.delete("/{run_id}")
async def delete_run(run_id: InPath, runs: TheRuns) -> Deleted:
    """Delete a run; it can be restored for a day."""
    return Deleted(deleted=run_id, undo_until=await runs.delete(run_id))


@router.post("/{run_id}/restore")
async def restore_run(run_id: InPath, runs: TheRuns) -> RunRow:
    """Undo a deletion."""
    return await runs.restore(run_id)


@router.get("/{run_id}/view")
async def view_run(run_id: InPath, runs: TheRuns, log: TheLog) -> dict[str, Any]:
    """Everything a page needs to show a run as it is now, and where its stream goes on."""
    # Before the rest is read: an event that comes between is then sent again, never missed.
    sequence = log.last_id
    detail = await runs.detail(run_id)
    _, result = await runs.open_result(run_id)
    shown = await asyncio.to_thread(_shown, result)
    return {
        **detail.model_dump(mode="json"),
        "sequence": sequence,
        **shown,
        "live_map": runs.live_map(run_id),
    }


def _shown(result: StudyResult) -> dict[str, Any]:
    return {
        "axes": result.axes.to_json(),
        "variants": [variant.model_dump(mode="json") for variant in result.study.curves],
        "points": [
            [None if point is None else point.summary() for point in curve]
            for curve in result.points
        ],
    }


@router.get("/{run_id}/points/{variant}/{point}")
async def get_point(run_id: InPath, variant: int, point: int, runs: TheRuns) -> dict[str, Any]:
    """Every curve of one point."""
    found = await runs.open_point(run_id, variant, point)
    detail: dict[str, Any] = await asyncio.to_thread(found.detail)
    return detail


@router.get(
    "/{run_id}/maps/{variant}/{point}",
    response_class=Response,
    responses={200: {"content": {"application/octet-stream": {}}}},
)
async def get_map(run_id: InPath, variant: int, point: int, runs: TheRuns) -> Response:
    """The evolution map of one realization: uint8 (layers, rows, columns), C order.

    Layers: contrast S1/S0 (0 is −1 and 255 is +1), the intensities of both components (W per
    count in X-Map-Intensity-Scale), then S2/S0 and S3/S0 like the contrast.
    """
    picture = (await runs.open_point(run_id, variant, point)).picture
    if picture is None:
        raise NotFound("this point has no evolution map: its summary says so (has_map)")
    layers, rows, columns = picture.data.shape
    return Response(
        picture.data.tobytes(),
        media_type="application/octet-stream",
        headers={
            "X-Map-Layers": str(layers),
            "X-Map-Rows": str(rows),
            "X-Map-Columns": str(columns),
            "X-Map-Intensity-Scale": f"{picture.intensity_scale_w:.7g}",
        },
    )


@router.get(
    "/{run_id}/result",
    response_class=FileResponse,
    responses={200: {"content": {"application/x-hdf5": {}}}},
)
async def get_result(run_id: InPath, runs: TheRuns) -> FileResponse:
    """The self-describing HDF5 file, once the run is done."""
    _, path = await runs.result_path(run_id)
    return FileResponse(path, media_type="application/x-hdf5", filename=f"crossdip-{run_id}.h5")


@router.get(
    "/{run_id}/curves.csv",
    response_class=Response,
    responses={200: {"content": {"text/csv": {}}}},
)
async def get_curves(run_id: InPath, runs: TheRuns) -> Response:
    """C12(0) and its error bars against the sweep, as far as the run is."""
    _, result = await runs.open_result(run_id)
    text = await asyncio.to_thread(curves_csv, result)
    disposition = f'attachment; filename="crossdip-{run_id}.csv"'
    return Response(text, media_type="text/csv", headers={"Content-Disposition": disposition})


@router.get(
    "/{run_id}/along.csv",
    response_class=Response,
    responses={200: {"content": {"text/csv": {}}}},
)
async def get_along(run_id: InPath, runs: TheRuns) -> Response:
    """C12(0) over swept parameters and distance as a table."""
    _, result = await runs.open_result(run_id)
    text = await asyncio.to_thread(along_csv, result)
    disposition = f'attachment; filename="crossdip-{run_id}-along.csv"'
    return Response(text, media_type="text/csv", headers={"Content-Disposition": disposition})


@router.get(
    "/{run_id}/picture.svg",
    response_class=Response,
    responses={200: {"content": {"image/svg+xml": {}}}},
)
async def get_picture(run_id: InPath, runs: TheRuns) -> Response:
    """The small dip curve of the Library."""
    return Response(await runs.picture(run_id), media_type="image/svg+xml")


@router.get("/{run_id}/events", response_class=EventSourceResponse)
async def follow_run(
    log: TheLog,
    after: After = "",
    last_event_id: Annotated[str, Header(max_length=64)] = "",
) -> AsyncIterator[ServerSentEvent]:
    """The run's events, from where the reader was, until it ends."""
    async for event in log.follow(last_event_id or after):
        yield event
