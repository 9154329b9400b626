"""The database: round trips, search, undo, migration."""

import hashlib
import sqlite3
import threading
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from server.lifecycle import IllegalTransition
from server.storage import MIGRATIONS, KeyRecord, Storage, claim_folder

TEXT = st.text(st.characters(exclude_categories=["Cs"]), min_size=1, max_size=60)


@pytest.fixture
def storage(tmp_path: Path) -> Iterator[Storage]:
    opened = Storage(tmp_path / "test.sqlite3")
    yield opened
    opened.close()


def _id_of(text: str) -> str:
    return hashlib.sha256(text.encode()).hexdigest()[:16]


def _add(storage: Storage, run_id: str = "a" * 16, title: str = "title") -> str:
    assert storage.add_run(run_id, title, "{}", 4)
    return run_id


@given(title=TEXT, study=TEXT)
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=40)
def test_a_run_comes_back_as_it_was_stored(storage: Storage, title: str, study: str) -> None:
    run_id = _id_of(title + "|" + study)
    new = storage.add_run(run_id, title, study, 7)
    record = storage.run(run_id)
    assert record is not None
    assert (record.title, record.study, record.state) == (title, study, "queued")
    assert record.points_total == 7
    assert new or not storage.add_run(run_id, "other", "other", 1)


@given(words=st.lists(TEXT, min_size=1, max_size=3))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=40)
def test_a_run_is_found_by_any_piece_of_its_title(storage: Storage, words: list[str]) -> None:
    title = "…".join(words)
    run_id = _id_of(title)
    storage.add_run(run_id, title, "{}", 1)
    found, total = storage.runs(title[: len(title) // 2 + 1], 10_000, 0)
    assert run_id in {record.id for record in found}
    assert total == len(found)


def test_search_takes_percent_and_underscore_literally(storage: Storage) -> None:
    _add(storage, "1" * 16, "50 % split")
    _add(storage, "2" * 16, "5000 split")
    assert [record.id for record in storage.runs("50 %", 9, 0)[0]] == ["1" * 16]
    assert storage.runs("0_0", 9, 0)[1] == 0


def test_pages_are_newest_first_and_do_not_overlap(storage: Storage) -> None:
    ids = [f"{number:016x}" for number in range(5)]
    for run_id in ids:
        _add(storage, run_id)
    first, total = storage.runs("", 3, 0)
    second, _ = storage.runs("", 3, 3)
    assert [record.id for record in first + second] == ids[::-1]
    assert total == 5


def test_an_illegal_step_changes_nothing(storage: Storage) -> None:
    run_id = _add(storage)
    before = storage.run(run_id)
    with pytest.raises(IllegalTransition):
        storage.step(run_id, "finish")
    assert storage.run(run_id) == before


def test_of_many_cancellers_one_succeeds(storage: Storage) -> None:
    run_id = _add(storage)
    outcomes: list[str] = []

    def cancel() -> None:
        try:
            outcomes.append(storage.step(run_id, "cancel"))
        except IllegalTransition:
            outcomes.append("refused")

    threads = [threading.Thread(target=cancel) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(outcomes) == ["cancelled", *["refused"] * 7]


def test_a_deleted_run_is_hidden_restored_and_at_last_purged(
    storage: Storage, monkeypatch: pytest.MonkeyPatch
) -> None:
    run_id = _add(storage)
    storage.delete_run(run_id)
    assert storage.runs("", 9, 0) == ([], 0)
    storage.restore_run(run_id)
    assert storage.runs("", 9, 0)[1] == 1
    storage.delete_run(run_id)
    storage.purge()
    assert storage.run_ids() == {run_id}
    monkeypatch.setattr("server.storage.UNDO_PERIOD", timedelta(seconds=-1))
    storage.purge()
    assert storage.run_ids() == set()


def test_a_session_keeps_the_order_of_its_runs_and_its_notes(storage: Storage) -> None:
    storage.add_session("s", "first light")
    for run_id in ("b" * 16, "a" * 16):
        _add(storage, run_id)
        storage.put_session_run("s", run_id)
        storage.put_session_run("s", run_id)
    storage.change_session("s", None, "notes\nof two lines")
    assert [record.id for record in storage.session_runs("s")] == ["b" * 16, "a" * 16]
    session = storage.session("s")
    assert session is not None
    assert (session.name, session.notes, session.runs) == ("first light", "notes\nof two lines", 2)
    storage.take_session_run("s", "b" * 16)
    assert [record.id for record in storage.session_runs("s")] == ["a" * 16]
    assert storage.run("b" * 16) is not None


def test_new_keys_end_old_cookies(storage: Storage) -> None:
    later = (datetime.now(UTC) + timedelta(days=1)).isoformat()
    storage.add_cookie(b"digest", "write", later)
    assert storage.cookie(b"digest") == "write"
    assert storage.cookie(b"other") is None
    storage.replace_keys([KeyRecord("write", b"salt", b"hash")])
    assert storage.cookie(b"digest") is None
    storage.add_cookie(b"old", "look", "2020-01-01T00:00:00Z")
    assert storage.cookie(b"old") is None


def test_the_file_is_reopened_and_a_newer_one_refused(tmp_path: Path) -> None:
    path = tmp_path / "test.sqlite3"
    first = Storage(path)
    _add(first)
    first.close()
    again = Storage(path)
    assert again.run_ids() == {"a" * 16}
    again.close()
    with sqlite3.connect(path) as connection:
        connection.execute(f"PRAGMA user_version = {len(MIGRATIONS) + 1}")
    connection.close()
    with pytest.raises(sqlite3.DatabaseError, match="newer Crossdip"):
        Storage(path)


def test_a_data_folder_has_one_server(tmp_path: Path) -> None:
    held = claim_folder(tmp_path / "data")
    with pytest.raises(BlockingIOError):
        claim_folder(tmp_path / "data")
    held.close()
    claim_folder(tmp_path / "data").close()
