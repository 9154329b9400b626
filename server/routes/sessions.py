"""Routes of sessions."""

from typing import Annotated

from fastapi import APIRouter, Path

from server.dependencies import InPath, TheSessions
from server.schemas import Deleted, NewSession, SessionChange, SessionDetail, SessionList

router = APIRouter(prefix="/api/sessions", tags=["sessions"])

SessionId = Annotated[str, Path(max_length=40)]


@router.get("")
async def list_sessions(sessions: TheSessions) -> SessionList:
    """All sessions, the last changed first."""
    return SessionList(sessions=await sessions.rows())


@router.post("", status_code=201)
async def post_session(body: NewSession, sessions: TheSessions) -> SessionDetail:
    """Open a session."""
    return await sessions.open(body.name)


@router.get("/{session_id}")
async def get_session(session_id: SessionId, sessions: TheSessions) -> SessionDetail:
    """One session with its notes and runs."""
    return await sessions.detail(session_id)


@router.patch("/{session_id}")
async def change_session(
    session_id: SessionId, body: SessionChange, sessions: TheSessions
) -> SessionDetail:
    """Rename a session or replace its notes."""
    return await sessions.change(session_id, body.name, body.notes)


@router.delete("/{session_id}")
async def delete_session(session_id: SessionId, sessions: TheSessions) -> Deleted:
    """Delete a session, not its runs; it can be restored for a day."""
    return Deleted(deleted=session_id, undo_until=await sessions.delete(session_id))


@router.post("/{session_id}/restore")
async def restore_session(session_id: SessionId, sessions: TheSessions) -> SessionDetail:
    """Undo a deletion."""
    return await sessions.restore(session_id)


@router.put("/{session_id}/runs/{run_id}")
async def put_run(session_id: SessionId, run_id: InPath, sessions: TheSessions) -> SessionDetail:
    """Put a run into a session."""
    return await sessions.put_run(session_id, run_id)


@router.delete("/{session_id}/runs/{run_id}")
async def take_run(session_id: SessionId, run_id: InPath, sessions: TheSessions) -> SessionDetail:
    """Take a run out of a session; the run itself stays."""
    return await sessions.take_run(session_id, run_id)
