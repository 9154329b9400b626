"""How routes reach the parts of the running server."""

from typing import Annotated

from fastapi import Depends, Path, Request

from server.limits import refuse_oversize
from server.runs import Runs
from server.schemas import RunId
from server.sessions import Sessions
from server.stream import EventLog


def _runs(request: Request) -> Runs:
    runs = request.app.state.runs
    assert isinstance(runs, Runs)
    return runs


def _sessions(request: Request) -> Sessions:
    sessions = request.app.state.sessions
    assert isinstance(sessions, Sessions)
    return sessions


TheRuns = Annotated[Runs, Depends(_runs)]
TheSessions = Annotated[Sessions, Depends(_sessions)]
InPath = Annotated[RunId, Path(description="Identity of a run: 16 hexadecimal digits.")]


async def _run_log(run_id: InPath, runs: TheRuns) -> EventLog:
    return await runs.log(run_id)


async def within_limits(request: Request) -> None:
    """Refuse an oversize study before its model is built."""
    try:
        body = await request.json()
    except ValueError:
        return  # an empty body, say: validation has the words for it
    refuse_oversize(body, request.app.state.settings)


TheLog = Annotated[EventLog, Depends(_run_log)]
