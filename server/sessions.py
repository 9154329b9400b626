"""Named collections of runs with notes."""

import asyncio
import secrets

from server.errors import NotFound
from server.runs import Runs
from server.schemas import SessionDetail, SessionRow
from server.storage import SessionRecord, Storage, undo_until


class Sessions:
    """Every session of one data folder."""

    def __init__(self, storage: Storage, runs: Runs) -> None:
        self._storage = storage
        self._runs = runs

    async def rows(self) -> list[SessionRow]:
        """All sessions, the last changed first."""
        records = await asyncio.to_thread(self._storage.sessions)
        return [_row(record) for record in records]

    async def open(self, name: str) -> SessionDetail:
        """A new, empty session."""
        session_id = secrets.token_hex(6)
        await asyncio.to_thread(self._storage.add_session, session_id, name)
        return await self.detail(session_id)

    async def detail(self, session_id: str) -> SessionDetail:
        """One session with notes and runs; raises NotFound."""
        record = await self._record(session_id)
        runs = await asyncio.to_thread(self._storage.session_runs, session_id)
        return SessionDetail(
            id=record.id,
            name=record.name,
            notes=record.notes,
            created=record.created,
            updated=record.updated,
            runs=[self._runs.row_of(run) for run in runs],
        )

    async def change(self, session_id: str, name: str | None, notes: str | None) -> SessionDetail:
        """Rename, or replace the notes, or both."""
        await self._record(session_id)
        await asyncio.to_thread(self._storage.change_session, session_id, name, notes)
        return await self.detail(session_id)

    async def delete(self, session_id: str) -> str:
        """Hide; returns until when that can be undone."""
        await self._record(session_id)
        return undo_until(await asyncio.to_thread(self._storage.delete_session, session_id))

    async def restore(self, session_id: str) -> SessionDetail:
        """Undo a deletion."""
        known = await asyncio.to_thread(self._storage.session, session_id, deleted=True)
        if known is not None:
            await asyncio.to_thread(self._storage.restore_session, session_id)
        return await self.detail(session_id)

    async def put_run(self, session_id: str, run_id: str) -> SessionDetail:
        """Add a run."""
        await self._record(session_id)
        await self._runs.row(run_id)
        await asyncio.to_thread(self._storage.put_session_run, session_id, run_id)
        return await self.detail(session_id)

    async def take_run(self, session_id: str, run_id: str) -> SessionDetail:
        """Take a run out; the run itself stays in the Library."""
        await self._record(session_id)
        await asyncio.to_thread(self._storage.take_session_run, session_id, run_id)
        return await self.detail(session_id)

    async def _record(self, session_id: str) -> SessionRecord:
        record = await asyncio.to_thread(self._storage.session, session_id)
        if record is None:
            raise NotFound(f"there is no session {session_id[:40]}: look for it under Sessions")
        return record


def _row(record: SessionRecord) -> SessionRow:
    return SessionRow(
        id=record.id,
        name=record.name,
        created=record.created,
        updated=record.updated,
        runs=record.runs,
    )
