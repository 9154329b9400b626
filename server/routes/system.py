"""Routes about the server itself."""

from collections.abc import AsyncIterator
from typing import Annotated, Any

from fastapi import APIRouter, Header, Request, Response
from fastapi.responses import PlainTextResponse
from fastapi.sse import EventSourceResponse, ServerSentEvent

from server.dependencies import TheRuns
from server.engine import Engine
from server.routes.runs import After
from server.schemas import Access, Health
from server.stream import Board
from solver.experiment import Study

router = APIRouter(tags=["system"])


@router.get("/healthz")
async def health(request: Request) -> Health:
    """The server answers; whether its workers are there."""
    engine: Engine = request.app.state.engine
    return Health(status="ok", workers=engine.workers, engine=engine.condition)


@router.get("/metrics", response_class=PlainTextResponse)
async def metrics(request: Request, runs: TheRuns) -> Response:
    """Counters in the Prometheus text format."""
    engine: Engine = request.app.state.engine
    board: Board = request.app.state.board
    lines = ["# HELP crossdip_runs Runs in each state.", "# TYPE crossdip_runs gauge"]
    for state, count in (await runs.states()).items():
        lines.append(f'crossdip_runs{{state="{state}"}} {count}')
    for name, kind, help_text, value in (
        ("workers", "gauge", "Worker processes present.", engine.workers),
        ("engine_ready", "gauge", "1 when tasks are taken.", int(engine.condition == "ready")),
        ("tasks_total", "counter", "Tasks finished since the start.", engine.tasks_done),
        (
            "realizations_total",
            "counter",
            "Realizations computed since the start.",
            runs.realizations_done,
        ),
        ("streams", "gauge", "Event streams open.", board.followers),
    ):
        lines += [
            f"# HELP crossdip_{name} {help_text}",
            f"# TYPE crossdip_{name} {kind}",
            f"crossdip_{name} {value}",
        ]
    return PlainTextResponse(
        "\n".join(lines) + "\n", media_type="text/plain; version=0.0.4; charset=utf-8"
    )


@router.get("/api/access")
async def access(request: Request) -> Access:
    """What the asker may do."""
    return Access(may=request.state.may)


@router.get("/api/defaults")
async def defaults() -> dict[str, Any]:
    """The headline study."""
    return Study().model_dump(mode="json")


@router.get("/api/events", response_class=EventSourceResponse)
async def follow_all(
    request: Request,
    after: After = "",
    last_event_id: Annotated[str, Header(max_length=64)] = "",
) -> AsyncIterator[ServerSentEvent]:
    """State and progress of every run, for the Library."""
    library = request.app.state.board.library
    async for event in library.follow(last_event_id or after or library.last_id):
        yield event
