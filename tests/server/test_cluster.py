"""A Dask cluster that somebody else started, each part a process of its own, as documented."""

import asyncio
import json
import logging
import os
import shutil
import socket
import subprocess
import sys
import time
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import Any

import distributed
import pytest

from server.engine import Engine, EngineError
from server.errors import SettingsError
from server.execution import Execution
from server.settings import Cluster, read_settings
from server.worker import offer
from solver.experiment import NUMERICS, Study
from solver.result import StudyResult, read_result
from solver.study import StudyState, execute
from solver.task import Task
from tests.asynchronous import run
from tests.counting import execute_and_count
from tests.serving import ROOT, crossdip, tiny

DASK = Path(sys.executable).parent / "dask"
MOST_LOST = 6
"""Tasks one lost worker may have had in hand: one under way, others done but not yet fetched."""


@contextmanager
def _process(
    *arguments: str | Path, environment: Mapping[str, str] | None = None
) -> Iterator[subprocess.Popen[bytes]]:
    process = subprocess.Popen(
        [DASK, *arguments],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        cwd="/",
        env={**os.environ, "PYTHONPATH": str(ROOT), **(environment or {})},
    )
    try:
        yield process
    finally:
        process.kill()
        process.wait()


def _scheduler(port: int, *more: str | Path) -> Any:
    return _process(
        "scheduler", "--host", "127.0.0.1", "--port", str(port), "--no-dashboard",
        "--dashboard-address", "127.0.0.1:0", *more,
    )  # fmt: skip


def _worker(
    address: str,
    folder: Path,
    *more: str | Path,
    preload: bool = True,
    environment: Mapping[str, str] | None = None,
) -> Any:
    return _process(
        "worker", address, "--nthreads", "1", "--no-nanny", "--no-dashboard",
        "--dashboard-address", "127.0.0.1:0", "--local-directory", folder,
        *(("--preload", "server.worker") if preload else ()), *more,
        environment=environment,
    )  # fmt: skip


def _free_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as probe:
        return int(probe.getsockname()[1])


async def _until(condition: Callable[[], bool]) -> None:
    while not condition():
        await asyncio.sleep(0.02)


def _locally(study: Study) -> StudyResult:
    state = StudyState(study)
    tasks = state.ready()
    while tasks:
        task = tasks.pop(0)
        tasks += state.absorb(task, execute(task))
    return state.result()


def _details(result: StudyResult) -> list[Any]:
    return [point.detail() for curve in result.points for point in curve if point is not None]


class CountingEngine(Engine):
    """Has every execution noted, and keeps what has been delivered."""

    def __init__(self, folder: Path, cluster: Cluster) -> None:
        super().__init__(1, folder, cluster)
        self._folder = folder
        self.delivered: list[str] = []

    async def run(self, function: Callable[..., Any], *args: Any, priority: int = 0) -> Any:
        task: Task = args[0]
        outcome = await super().run(execute_and_count, str(self._folder), task, priority=priority)
        self.delivered.append(task.key)
        return outcome

    def executed(self, pid: int | None = None) -> list[str]:
        """Keys of all executions begun, or those of one process."""
        files = [path for path in self._folder.iterdir() if pid is None or path.name == str(pid)]
        return [key for path in files for key in path.read_text().split()]


# The client leaves the sockets of a lost scheduler to the garbage collector.
@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")
@pytest.mark.filterwarnings("ignore::ResourceWarning")
def test_losing_and_gaining_workers_and_the_scheduler_changes_no_bit(tmp_path: Path) -> None:
    port = _free_port()
    address = f"tcp://127.0.0.1:{port}"
    scratch, notes = tmp_path / "scratch", tmp_path / "notes"
    notes.mkdir()
    study = Study.model_validate(tiny(5, standard_error_target=1e-5, max_realizations=4000))
    lost: set[int] = set()

    async def check() -> None:
        engine = CountingEngine(notes, Cluster(address))
        engine.start()
        execution = Execution(study, engine, lambda news: None)
        whole = asyncio.create_task(execution.conduct())
        delivered_before = 0
        try:
            with (
                _scheduler(port) as scheduler,
                _worker(address, scratch) as one,
                _worker(address, scratch) as two,
            ):
                await _until(lambda: engine.workers == 2 and len(engine.delivered) >= 10)
                one.kill()
                with _worker(address, scratch) as late:
                    await _until(lambda: len(engine.executed(late.pid)) >= 5)
                    scheduler.kill()
                    await _until(lambda: two.poll() is not None and late.poll() is not None)
                    delivered_before = len(engine.delivered)
            await _until(lambda: engine.condition == "lost")
            assert not whole.done()
            lost.update(int(path.name) for path in notes.iterdir())
            assert len(lost) == 3
            with _scheduler(port), _worker(address, scratch), _worker(address, scratch):
                result = await whole
                assert len(engine.delivered) > delivered_before
                await engine.stop()
        finally:
            execution.close()
        assert _details(result) == _details(_locally(study))
        assert len(engine.delivered) == len(set(engine.delivered))
        again = Counter(engine.executed())
        again.subtract(engine.delivered)
        assert min(again.values()) == 0
        for pid in lost:
            assert len([key for key in engine.executed(pid) if again[key]]) <= MOST_LOST
        for path in notes.iterdir():
            if int(path.name) not in lost:
                keys = path.read_text().split()
                assert len(keys) == len(set(keys))
        assert again.total() <= MOST_LOST * len(lost)

    run(check())


def test_only_workers_of_this_version_are_given_tasks(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    port = _free_port()
    address = f"tcp://127.0.0.1:{port}"
    other = _other_version(tmp_path / "other")
    caplog.set_level(logging.WARNING)

    study, output = tmp_path / "study.json", tmp_path / "out.h5"
    study.write_text(json.dumps(tiny(6)))

    async def check(processes: ExitStack) -> None:
        engine = Engine(1, tmp_path, Cluster(address))
        engine.start()
        waiting = asyncio.create_task(engine.run(os.getpid))
        await _until(lambda: engine.condition == "ready")
        processes.enter_context(_worker(address, tmp_path, environment={"PYTHONPATH": other}))
        with pytest.raises(EngineError, match=r"has crossdip 9\.9\.9 .*same version on both"):
            await waiting
        ended = await asyncio.to_thread(
            crossdip, "run", str(study), "-o", str(output), "--cluster", address
        )
        assert ended.returncode == 1
        assert "has crossdip 9.9.9" in ended.stderr
        assert f"this is {offer()}" in ended.stderr
        assert not output.exists()
        good = processes.enter_context(_worker(address, tmp_path))
        await _until(lambda: engine.workers == 1)
        assert await engine.run(os.getpid) == good.pid
        caplog.clear()
        with (
            _worker(address, tmp_path, environment={"PYTHONPATH": other}),
            _worker(address, tmp_path, preload=False),
        ):
            await _until(lambda: len(caplog.messages) == 2)
            assert engine.workers == 1
            pids = await asyncio.gather(*[engine.run(os.getpid) for _ in range(30)])
            assert set(pids) == {good.pid}
        await engine.stop()

    with ExitStack() as processes:
        processes.enter_context(_scheduler(port))
        run(check(processes))
    told = "\n".join(caplog.messages)
    assert f"has crossdip 9.9.9 (numerics {NUMERICS}, solver" in told
    assert "start it with --preload server.worker" in told
    assert told.count(offer()) == 2


def _other_version(folder: Path) -> str:
    """Another version of the package, installed in a folder of its own."""
    for package in ("solver", "server"):
        shutil.copytree(ROOT / package, folder / package)
    with (folder / "solver" / "units.py").open("a") as file:
        file.write("# one more line\n")
    (folder / "crossdip-9.9.9.dist-info").mkdir()
    (folder / "crossdip-9.9.9.dist-info" / "METADATA").write_text(
        "Metadata-Version: 2.1\nName: crossdip\nVersion: 9.9.9\n"
    )
    return str(folder)


def test_a_study_over_tls_and_nobody_without_the_key(tmp_path: Path) -> None:
    files = _credentials(tmp_path)
    port = _free_port()
    address = f"tls://127.0.0.1:{port}"
    theirs = ["--tls-ca-file", files["ca"], "--tls-cert", files["certificate"],
              "--tls-key", files["key"]]  # fmt: skip
    ours = [text for name, path in files.items() for text in (f"--cluster-{name}", str(path))]
    study = tmp_path / "study.json"
    study.write_text(json.dumps(tiny(7)))
    output = tmp_path / "out.h5"
    with _scheduler(port, "--protocol", "tls", *theirs), _worker(address, tmp_path, *theirs):
        ended = crossdip("run", str(study), "-o", str(output), "--cluster", address, *ours)
        assert ended.returncode == 0, ended.stderr
        with pytest.raises(OSError, match=r"^in <TCP|[Tt]imed out"):
            distributed.Client(f"tcp://127.0.0.1:{port}", timeout=1)
    assert _details(read_result(output)) == _details(_locally(Study.model_validate(tiny(7))))


def _credentials(folder: Path) -> dict[str, Path]:
    temporary = distributed.Security.temporary()
    texts = {
        "ca": temporary.tls_ca_file,
        "certificate": temporary.tls_client_cert,
        "key": temporary.tls_client_key,
    }
    for name, text in texts.items():
        (folder / f"{name}.pem").write_text(text)
    return {name: folder / f"{name}.pem" for name in texts}


def test_cluster_flags_and_variables_and_what_is_wrong_with_them(tmp_path: Path) -> None:
    files = _credentials(tmp_path)
    (tmp_path / "empty.pem").touch()
    tls = {f"cluster_{name}": str(path) for name, path in files.items()}
    read = read_settings({"cluster": "node1:8786"}, {}).cluster
    assert read == Cluster("tcp://node1:8786")
    in_environment = {f"CROSSDIP_{name.upper()}": text for name, text in tls.items()}
    read = read_settings({"cluster": "node1:8786"}, in_environment).cluster
    assert read == Cluster("tls://node1:8786", **files)
    faults: list[tuple[dict[str, str], str]] = [
        ({"cluster": "node1"}, r"--cluster .*CROSSDIP_CLUSTER.* tcp://node1:8786, not 'node1'"),
        ({"cluster": "http://node1:80"}, "--cluster"),
        ({"cluster": "node1:0"}, "--cluster"),
        ({"cluster": "n" * 10_000 + ":80"}, "--cluster"),
        ({"cluster": "tls://node1:8786"}, "needs --cluster-ca"),
        ({"cluster": "tcp://node1:8786", **tls}, "write tls://node1:8786"),
        (tls, "give it too"),
        ({"cluster": "node1:1", "cluster_ca": tls["cluster_ca"]},
         "give --cluster-certificate and --cluster-key too"),
        ({"cluster": "node1:1", **tls, "cluster_key": str(tmp_path / "none.pem")},
         r"--cluster-key .*none\.pem cannot be read \(No such file"),
        ({"cluster": "node1:1", **tls, "cluster_ca": str(tmp_path)}, "directory"),
        ({"cluster": "node1:1", **tls, "cluster_ca": "/dev/zero"}, "larger than 1 MB"),
        ({"cluster": "node1:1", **tls, "cluster_ca": str(tmp_path / "empty.pem")}, "is empty"),
        ({"cluster": "node1:1", **tls, "cluster_ca": tls["cluster_key"]}, "holds no certificate"),
        ({"cluster": "node1:1", **tls, "cluster_key": tls["cluster_ca"]}, "are no pair"),
    ]  # fmt: skip
    for flags, message in faults:
        with pytest.raises(SettingsError, match=message):
            read_settings(flags, {})


def test_a_cancelled_task_does_not_keep_a_worker_busy(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("server.engine._PATIENCE_S", 0.5)

    async def check() -> None:
        engine = Engine(1, tmp_path)
        engine.start()
        try:
            before = await engine.run(os.getpid)
            short = asyncio.create_task(engine.run(time.sleep, 0.4))
            await asyncio.sleep(0.2)
            short.cancel()
            await asyncio.sleep(1.0)
            assert await engine.run(os.getpid) == before
            long = asyncio.create_task(engine.run(time.sleep, 600))
            await asyncio.sleep(0.3)
            long.cancel()
            assert await asyncio.wait_for(engine.run(os.getpid), 30) != before
        finally:
            await engine.stop()

    run(check())
