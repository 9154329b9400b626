"""What may go wrong while a run is under way: nothing is lost, nothing is half-written."""

import contextlib
import os
import shutil
import signal
import subprocess
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import h5py
import psutil
import pytest

from tests.serving import LiveServer, crossdip, lengthy


def enough(seed: int) -> dict[str, Any]:
    """A study of some seconds that comes to an end: to be interrupted and compared."""
    study = lengthy(seed)
    study["experiment"]["ensemble"]["max_realizations"] = 192
    study["sweep"]["points"] = 2
    return study


def bits(path: Path) -> dict[str, bytes]:
    """Every data set of a result file, byte for byte."""
    found: dict[str, bytes] = {}

    def visit(name: str, item: object) -> None:
        if isinstance(item, h5py.Dataset):
            found[name] = item[()].tobytes()

    with h5py.File(path) as file:
        file.visititems(visit)
    return found


def workers_of(pid: int) -> list[psutil.Process]:
    """The worker processes of a server."""
    return [
        child
        for child in psutil.Process(pid).children(recursive=True)
        if any("spawn_main" in part for part in child.cmdline())
    ]


@pytest.fixture(scope="module")
def undisturbed(server: LiveServer) -> dict[str, bytes]:
    """The result of a run that nobody disturbs."""
    run_id = server.post(enough(20))
    assert server.wait(run_id, "done", "failed")["state"] == "done"
    return bits(server.data / "results" / f"{run_id}.h5")


def test_cancel_is_prompt_and_continue_goes_on_from_there(server: LiveServer) -> None:
    again = server.post(enough(21))
    server.wait_for_progress(again, 64)
    start_s = time.monotonic()
    cancelled = server.client.post(f"/api/runs/{again}/cancel")
    assert cancelled.json()["state"] == "cancelled"
    assert [event.kind for event in server.events(again)][-1] == "state"
    assert time.monotonic() - start_s < 1.0
    had = server.wait(again, "cancelled")["progress"]["realizations"]
    assert had >= 64
    time.sleep(0.2)
    view = server.get(f"/api/runs/{again}/view")
    kept = sum(point["realizations"] for curve in view["points"] for point in curve if point)
    assert 0 < kept <= had
    resumed = server.client.post(f"/api/runs/{again}/resume")
    assert resumed.json()["state"] in {"queued", "running"}
    first = next(event for event in server.events(again, "new-0") if event.kind == "progress")
    assert first.data["realizations"] >= kept
    assert server.wait(again, "done", "failed")["state"] == "done"
    _until_gone(server.data / "checkpoints" / again)


def _until_gone(path: Path) -> None:
    """Checkpoints go when the end of the run is on record, a moment after it is told."""
    for _ in range(100):
        if not path.exists():
            return
        time.sleep(0.05)
    pytest.fail(f"{path.name} is still there")


def test_neither_a_killed_worker_nor_an_ended_server_changes_a_bit(
    own_server: LiveServer, undisturbed: dict[str, bytes]
) -> None:
    own_server.start()
    run_id = own_server.post(enough(20))
    own_server.wait_for_progress(run_id, 16)
    workers = workers_of(own_server.pid)
    assert len(workers) == 2
    assert {worker.nice() for worker in workers} == {5}
    workers[0].kill()
    own_server.wait_for_progress(run_id, 64)
    _interrupt_with_a_stream_open(own_server, run_id)

    own_server.start()
    assert own_server.get(f"/api/runs/{run_id}")["state"] in {"queued", "running"}
    own_server.wait_for_progress(run_id, 200)
    time.sleep(0.2)
    _kill_and_leave_debris(own_server, run_id)

    own_server.start()
    row = own_server.wait(run_id, "done", "failed")
    assert (row["state"], row["problems"]) == ("done", 0)
    results = own_server.data / "results"
    assert [path.name for path in results.iterdir()] == [f"{run_id}.h5"]
    assert bits(results / f"{run_id}.h5") == undisturbed


def _interrupt_with_a_stream_open(server: LiveServer, run_id: str) -> None:
    workers = workers_of(server.pid)
    events = server.events(run_id)
    next(events)
    start_s = time.monotonic()
    server.signal(signal.SIGINT)
    assert time.monotonic() - start_s < 3.0
    assert not any(worker.is_running() for worker in workers)
    events.close()


def _kill_and_leave_debris(server: LiveServer, run_id: str) -> None:
    workers = workers_of(server.pid)
    server.signal(signal.SIGKILL)
    _, alive = psutil.wait_procs(workers, timeout=8.0)
    assert alive == []
    checkpoints = list((server.data / "checkpoints" / run_id).glob("*.npz"))
    assert checkpoints
    checkpoints[0].write_bytes(checkpoints[0].read_bytes()[:100])
    (server.data / "results" / f".{run_id}.h5.1.part").write_bytes(b"half")
    (server.data / "results" / ("0" * 16 + ".h5")).write_bytes(b"no row")


def fill(path: Path) -> None:
    """Write until not one more byte fits."""
    with path.open("wb", buffering=0) as file, contextlib.suppress(OSError):
        while file.write(bytes(65_536)):
            pass


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of two megabytes."""
    folder = tmp_path / "small"
    folder.mkdir()
    mounted = os.geteuid() == 0 and shutil.which("mount") is not None
    if mounted:
        command = ["mount", "-t", "tmpfs", "-o", "size=2m", "tmpfs", str(folder)]
        mounted = subprocess.run(command, check=False, capture_output=True).returncode == 0
    if not mounted:
        pytest.skip("mounting a small disk needs more rights than there are here")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def test_a_full_disk_fails_the_run_with_advice_and_can_be_continued(small_disk: Path) -> None:
    server = LiveServer(small_disk / "data")
    server.start()
    try:
        filler = small_disk / "filler"
        run_id = server.post(enough(20))
        server.wait_for_progress(run_id, 32)
        fill(filler)
        last = list(server.events(run_id))[-1]
        assert last.data["state"] == "failed"
        assert "Free some space, then press Continue" in last.data["message"]
        refused = server.client.post("/api/sessions", json={"name": "x" * 100})
        assert (refused.status_code, refused.json()["error"]["code"]) == (507, "disk_full")
        assert list((small_disk / "data" / "results").iterdir()) == []
        assert not list((small_disk / "data" / "checkpoints").rglob("*.new"))
        filler.unlink()
        assert server.wait(run_id, "failed")["message"] == last.data["message"]
        subprocess.run(["mount", "-o", "remount,size=64m", str(small_disk)], check=True)
        server.client.post(f"/api/runs/{run_id}/resume")
        assert server.wait(run_id, "done", "failed")["state"] == "done"
    finally:
        server.stop()


def test_a_second_server_on_the_same_folder_or_port_says_so(
    server: LiveServer, tmp_path: Path
) -> None:
    port = server.url.rpartition(":")[2]
    for flags, words in (
        (["--data", str(server.data), "--port", "0"], "another Crossdip server uses"),
        (["--data", str(tmp_path), "--port", port], f"cannot listen on 127.0.0.1 port {port}"),
        (["--data", str(tmp_path), "--host", "no.such.invalid"], "is not an address of this"),
        (["--data", "/proc/nothing"], "cannot be used"),
        (["--data", str(tmp_path), "--port", "high"], "--port"),
        (["--data", str(tmp_path), "--host", "0.0.0.0"], "--new-access-key"),
    ):
        ended = crossdip("serve", *flags)
        assert ended.returncode == 2
        assert words in ended.stderr
        assert ended.stderr.count("\n") == 1
