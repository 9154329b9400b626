"""The database: runs, sessions, access. The only module with SQL.

Every method blocks; the server calls them through ``asyncio.to_thread``. One connection writes,
behind a lock; another reads, which write-ahead logging lets it do at the same time.
"""

import fcntl
import sqlite3
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, fields
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, TextIO, get_args

from server.lifecycle import Action, State, after

UNDO_PERIOD = timedelta(hours=24)

MIGRATIONS = (
    """
    CREATE TABLE runs (
        id TEXT PRIMARY KEY,
        title TEXT NOT NULL,
        state TEXT NOT NULL,
        message TEXT NOT NULL DEFAULT '',
        study TEXT NOT NULL,
        created TEXT NOT NULL,
        updated TEXT NOT NULL,
        queued TEXT NOT NULL,
        deleted TEXT,
        problems INTEGER NOT NULL DEFAULT 0,
        fraction REAL NOT NULL DEFAULT 0,
        realizations INTEGER NOT NULL DEFAULT 0,
        points_done INTEGER NOT NULL DEFAULT 0,
        points_total INTEGER NOT NULL DEFAULT 0,
        picture TEXT NOT NULL DEFAULT ''
    );
    CREATE INDEX runs_by_date ON runs (created DESC);
    CREATE TABLE sessions (
        id TEXT PRIMARY KEY,
        name TEXT NOT NULL,
        notes TEXT NOT NULL DEFAULT '',
        created TEXT NOT NULL,
        updated TEXT NOT NULL,
        deleted TEXT
    );
    CREATE TABLE session_runs (
        session_id TEXT NOT NULL REFERENCES sessions (id) ON DELETE CASCADE,
        run_id TEXT NOT NULL REFERENCES runs (id) ON DELETE CASCADE,
        added TEXT NOT NULL,
        PRIMARY KEY (session_id, run_id)
    );
    CREATE TABLE access_keys (
        may TEXT PRIMARY KEY,
        salt BLOB NOT NULL,
        hash BLOB NOT NULL,
        created TEXT NOT NULL
    );
    CREATE TABLE access_cookies (
        hash BLOB PRIMARY KEY,
        may TEXT NOT NULL,
        expires TEXT NOT NULL
    );
    """,
)


@dataclass(frozen=True)
class RunRecord:
    """One row of runs, without its picture."""

    id: str
    title: str
    state: State
    message: str
    study: str
    created: str
    updated: str
    deleted: str | None
    problems: int
    fraction: float
    realizations: int
    points_done: int
    points_total: int


@dataclass(frozen=True)
class SessionRecord:
    """One row of sessions."""

    id: str
    name: str
    notes: str
    created: str
    updated: str
    runs: int


@dataclass(frozen=True)
class KeyRecord:
    """A stored access key: its salted hash and what it permits."""

    may: str
    salt: bytes
    hash: bytes


_RUN_COLUMNS = ", ".join(f"runs.{field.name}" for field in fields(RunRecord))
_SESSION_COLUMNS = (
    "id, name, notes, created, updated, (SELECT count(*) FROM session_runs JOIN runs ON "
    "runs.id = run_id AND runs.deleted IS NULL WHERE session_id = sessions.id)"
)
Counters = dict[str, float | str]
"""What a run has reached, by column: see _COUNTERS."""
_COUNTERS = ("problems", "fraction", "realizations", "points_done", "points_total", "picture")


def claim_folder(folder: Path) -> TextIO:
    """Make the data folder and hold it for this process; keep the returned file open.

    Raises BlockingIOError when another server holds it, OSError when it cannot be made.
    """
    folder.mkdir(parents=True, exist_ok=True)
    held = (folder / "lock").open("a")
    try:
        fcntl.flock(held, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        held.close()
        raise
    return held


def now() -> str:
    """This moment, ISO 8601 in UTC, to the microsecond so that rows sort by it."""
    return datetime.now(UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def undo_until(deleted: str) -> str:
    """When a deletion becomes final."""
    end = datetime.fromisoformat(deleted) + UNDO_PERIOD
    return end.isoformat(timespec="seconds").replace("+00:00", "Z")


def _pattern(text: str) -> str:
    escaped = text.replace("\\", r"\\").replace("%", r"\%").replace("_", r"\_")
    return f"%{escaped}%"


class Storage:
    """The database file of one data folder."""

    def __init__(self, path: Path) -> None:
        self._write_lock = threading.Lock()
        self._read_lock = threading.Lock()
        self._writer = self._connect(path)
        self._migrate()
        self._reader = self._connect(path)

    def close(self) -> None:
        """Close both connections."""
        with self._write_lock, self._read_lock:
            self._reader.close()
            self._writer.close()

    def add_run(self, run_id: str, title: str, study: str, points_total: int) -> bool:
        """Insert a queued run; False when it exists."""
        moment = now()
        with self._write() as db:
            cursor = db.execute(
                "INSERT OR IGNORE INTO runs (id, title, state, study, created, updated, queued, "
                "points_total) VALUES (?, ?, 'queued', ?, ?, ?, ?, ?)",
                (run_id, title, study, moment, moment, moment, points_total),
            )
            return cursor.rowcount == 1

    def run(self, run_id: str) -> RunRecord | None:
        """One run, deleted ones included."""
        rows = self._read(f"SELECT {_RUN_COLUMNS} FROM runs WHERE id = ?", (run_id,))
        return RunRecord(*rows[0]) if rows else None

    def runs(self, search: str, limit: int, offset: int) -> tuple[list[RunRecord], int]:
        """A page of runs that match every word, newest first, and how many match in all."""
        where = "deleted IS NULL"
        values: list[object] = []
        for word in search.split()[:16]:
            where += r" AND (title || ' ' || id || ' ' || study) LIKE ? ESCAPE '\'"
            values.append(_pattern(word))
        total = self._read(f"SELECT count(*) FROM runs WHERE {where}", values)[0][0]
        rows = self._read(
            f"SELECT {_RUN_COLUMNS} FROM runs WHERE {where} "
            "ORDER BY created DESC, rowid DESC LIMIT ? OFFSET ?",
            (*values, limit, offset),
        )
        return [RunRecord(*row) for row in rows], int(total)

    def run_states(self) -> dict[str, int]:
        """How many runs are in each state."""
        rows = self._read(
            "SELECT state, count(*) FROM runs WHERE deleted IS NULL GROUP BY state", ()
        )
        return dict.fromkeys(get_args(State), 0) | dict(rows)

    def unfinished(self) -> list[RunRecord]:
        """Queued and running runs in the order in which they were asked for."""
        rows = self._read(
            f"SELECT {_RUN_COLUMNS} FROM runs WHERE state IN ('queued', 'running') "
            "AND deleted IS NULL ORDER BY queued, rowid",
            (),
        )
        return [RunRecord(*row) for row in rows]

    def rename_run(self, run_id: str, title: str) -> None:
        """Change the title."""
        with self._write() as db:
            db.execute(
                "UPDATE runs SET title = ?, updated = ? WHERE id = ?", (title, now(), run_id)
            )

    def step(
        self, run_id: str, action: Action, message: str = "", counters: Counters | None = None
    ) -> State:
        """Change a run's state by the table of the lifecycle, and its counters with it.

        Raises KeyError for an unknown run, IllegalTransition when the table forbids it.
        """
        counters = counters or {}
        unknown = counters.keys() - set(_COUNTERS)
        if unknown:
            raise TypeError(f"no such counters: {', '.join(sorted(unknown))}")
        with self._write() as db:
            row = db.execute("SELECT state FROM runs WHERE id = ?", (run_id,)).fetchone()
            if row is None:
                raise KeyError(run_id)
            state = after(row[0], action)
            moment = now()
            changes: dict[str, object] = {"state": state, "message": message, "updated": moment}
            if action == "queue":
                changes["queued"] = moment
            changes |= counters
            assignments = ", ".join(f"{name} = ?" for name in changes)
            db.execute(f"UPDATE runs SET {assignments} WHERE id = ?", (*changes.values(), run_id))
        return state

    def delete_run(self, run_id: str) -> str:
        """Hide a run until the undo period ends; the moment of deletion."""
        return self._hide("runs", run_id)

    def restore_run(self, run_id: str) -> None:
        """Undo a deletion."""
        self._unhide("runs", run_id)

    def picture(self, run_id: str) -> str:
        """The small curve as SVG; empty when there is none."""
        rows = self._read("SELECT picture FROM runs WHERE id = ?", (run_id,))
        return str(rows[0][0]) if rows else ""

    def purge(self) -> None:
        """Remove for good what was deleted longer ago than the undo period."""
        limit = datetime.now(UTC) - UNDO_PERIOD
        moment = limit.isoformat(timespec="microseconds").replace("+00:00", "Z")
        with self._write() as db:
            db.execute("DELETE FROM runs WHERE deleted < ?", (moment,))
            db.execute("DELETE FROM sessions WHERE deleted < ?", (moment,))
            db.execute("DELETE FROM access_cookies WHERE expires < ?", (now(),))

    def run_ids(self) -> set[str]:
        """Every run that has a row, deleted ones included."""
        return {row[0] for row in self._read("SELECT id FROM runs", ())}

    def add_session(self, session_id: str, name: str) -> None:
        """Insert an empty session."""
        moment = now()
        with self._write() as db:
            db.execute(
                "INSERT INTO sessions (id, name, created, updated) VALUES (?, ?, ?, ?)",
                (session_id, name, moment, moment),
            )

    def sessions(self) -> list[SessionRecord]:
        """All sessions, the last changed first."""
        rows = self._read(
            f"SELECT {_SESSION_COLUMNS} FROM sessions WHERE deleted IS NULL "
            "ORDER BY updated DESC, rowid DESC",
            (),
        )
        return [SessionRecord(*row) for row in rows]

    def session(self, session_id: str, *, deleted: bool = False) -> SessionRecord | None:
        """One session; ``deleted`` looks among those that can still be restored."""
        test = "IS NOT NULL" if deleted else "IS NULL"
        rows = self._read(
            f"SELECT {_SESSION_COLUMNS} FROM sessions WHERE id = ? AND deleted {test}",
            (session_id,),
        )
        return SessionRecord(*rows[0]) if rows else None

    def session_runs(self, session_id: str) -> list[RunRecord]:
        """The runs of a session in the order in which they were put there."""
        rows = self._read(
            f"SELECT {_RUN_COLUMNS} FROM runs JOIN session_runs ON run_id = runs.id "
            "WHERE session_id = ? AND runs.deleted IS NULL ORDER BY added, session_runs.rowid",
            (session_id,),
        )
        return [RunRecord(*row) for row in rows]

    def change_session(self, session_id: str, name: str | None, notes: str | None) -> None:
        """Set what is not None."""
        with self._write() as db:
            db.execute(
                "UPDATE sessions SET name = coalesce(?, name), notes = coalesce(?, notes), "
                "updated = ? WHERE id = ?",
                (name, notes, now(), session_id),
            )

    def delete_session(self, session_id: str) -> str:
        """Hide a session until the undo period ends; the moment of deletion."""
        return self._hide("sessions", session_id)

    def restore_session(self, session_id: str) -> None:
        """Undo a deletion."""
        self._unhide("sessions", session_id)

    def put_session_run(self, session_id: str, run_id: str) -> None:
        """Add a run to a session; nothing happens when it is there."""
        with self._write() as db:
            db.execute(
                "INSERT OR IGNORE INTO session_runs VALUES (?, ?, ?)", (session_id, run_id, now())
            )
            db.execute("UPDATE sessions SET updated = ? WHERE id = ?", (now(), session_id))

    def take_session_run(self, session_id: str, run_id: str) -> None:
        """Take a run out of a session; the run itself stays."""
        with self._write() as db:
            db.execute(
                "DELETE FROM session_runs WHERE session_id = ? AND run_id = ?",
                (session_id, run_id),
            )
            db.execute("UPDATE sessions SET updated = ? WHERE id = ?", (now(), session_id))

    def access_keys(self) -> list[KeyRecord]:
        """The stored access keys."""
        return [
            KeyRecord(*row) for row in self._read("SELECT may, salt, hash FROM access_keys", ())
        ]

    def replace_keys(self, keys: list[KeyRecord]) -> None:
        """Store new keys; everything handed out before stops working."""
        with self._write() as db:
            db.execute("DELETE FROM access_keys")
            db.execute("DELETE FROM access_cookies")
            db.executemany(
                "INSERT INTO access_keys VALUES (?, ?, ?, ?)",
                [(key.may, key.salt, key.hash, now()) for key in keys],
            )

    def add_cookie(self, cookie_hash: bytes, may: str, expires: str) -> None:
        """Store the hash of a cookie that was handed out."""
        with self._write() as db:
            db.execute(
                "INSERT OR REPLACE INTO access_cookies VALUES (?, ?, ?)",
                (cookie_hash, may, expires),
            )

    def cookie(self, cookie_hash: bytes) -> str | None:
        """What the holder of a cookie may do; None when it is unknown or expired."""
        rows = self._read(
            "SELECT may FROM access_cookies WHERE hash = ? AND expires > ?", (cookie_hash, now())
        )
        return str(rows[0][0]) if rows else None

    def _hide(self, table: str, row_id: str) -> str:
        moment = now()
        with self._write() as db:
            db.execute(f"UPDATE {table} SET deleted = ? WHERE id = ?", (moment, row_id))
        return moment

    def _unhide(self, table: str, row_id: str) -> None:
        with self._write() as db:
            db.execute(f"UPDATE {table} SET deleted = NULL WHERE id = ?", (row_id,))

    @contextmanager
    def _write(self) -> Iterator[sqlite3.Connection]:
        with self._write_lock, self._writer:
            # IMMEDIATE: what is read before a write must not change under it.
            self._writer.execute("BEGIN IMMEDIATE")
            yield self._writer

    def _read(self, statement: str, values: Any) -> list[Any]:
        with self._read_lock:
            return self._reader.execute(statement, values).fetchall()

    def _migrate(self) -> None:
        version = self._writer.execute("PRAGMA user_version").fetchone()[0]
        if version > len(MIGRATIONS):
            raise sqlite3.DatabaseError("this data folder belongs to a newer Crossdip: update it")
        for number, script in enumerate(MIGRATIONS[version:], start=version + 1):
            self._writer.executescript(
                f"BEGIN IMMEDIATE; {script}; PRAGMA user_version = {number}; COMMIT;"
            )

    @staticmethod
    def _connect(path: Path) -> sqlite3.Connection:
        connection = sqlite3.connect(path, timeout=10.0, check_same_thread=False)
        connection.isolation_level = None
        connection.execute("PRAGMA journal_mode = WAL")
        connection.execute("PRAGMA synchronous = NORMAL")
        connection.execute("PRAGMA foreign_keys = ON")
        return connection
