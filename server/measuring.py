"""Studies timed on a server of one's own, and what its processes take meanwhile."""

import http.client
import json
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import psutil

from solver.result import StudyResult, read_result

SAMPLING_S = 0.25
"""Looking at every process of the machine takes time that the server would use."""
POLLING_S = 0.05
PATIENCE_S = 600


class Watch(threading.Thread):
    """Peak memory and processor time of a server and its workers, sampled while it runs."""

    def __init__(self, pid: int) -> None:
        super().__init__(daemon=True)
        self._server = psutil.Process(pid)
        self._done = threading.Event()
        self.peak_bytes: dict[str, int] = {"server": 0, "workers": 0}

    def run(self) -> None:
        while not self._done.wait(SAMPLING_S):
            self.sample()

    def sample(self) -> None:
        """Take the memory of now into the peaks."""
        try:
            workers = self._server.children(recursive=True)
            now = {
                "server": self._server.memory_info().rss,
                "workers": max((p.memory_info().rss for p in workers), default=0),
            }
        except psutil.Error:
            return  # a process ended between being listed and being read
        self.peak_bytes = {name: max(self.peak_bytes[name], now[name]) for name in now}

    def cpu_s(self) -> float:
        """Processor time used so far by the server and every process under it."""
        family = [self._server, *self._server.children(recursive=True)]
        return float(sum(sum(process.cpu_times()[:2]) for process in family))

    def server_cpu_s(self) -> float:
        """Processor time used so far by the server's own process."""
        return float(sum(self._server.cpu_times()[:2]))

    def stop(self) -> None:
        """End the sampling."""
        self._done.set()
        self.join()


@dataclass
class Timing:
    """When things first happened, in seconds after the POST."""

    first_s: dict[str, float] = field(default_factory=dict)
    end_s: float = 0.0
    cpu_s: float = 0.0
    server_cpu_s: float = 0.0
    points: int = 0
    run: str = ""


class Served:
    """A running server, spoken to over HTTP."""

    def __init__(self, port: int, pid: int) -> None:
        self._port = port
        self.watch = Watch(pid)

    def request(self, method: str, path: str, body: object = None) -> Any:
        """The JSON of an answer; raises RuntimeError when it is an error."""
        connection = http.client.HTTPConnection("127.0.0.1", self._port, timeout=PATIENCE_S)
        try:
            text = None if body is None else json.dumps(body)
            connection.request(method, path, text, {"Content-Type": "application/json"})
            answer = connection.getresponse()
            content = answer.read()
            if answer.status >= 400:
                raise RuntimeError(f"{method} {path} answered {answer.status}: {content!r}")
            return json.loads(content) if "json" in answer.headers["Content-Type"] else content
        finally:
            connection.close()

    def events(self, path: str) -> Iterator[str]:
        """The names of the events of a stream as they come, until it ends."""
        connection = http.client.HTTPConnection("127.0.0.1", self._port, timeout=PATIENCE_S)
        try:
            connection.request("GET", path)
            for line in connection.getresponse():
                if line.startswith(b"event:"):
                    yield line[6:].strip().decode()
        finally:
            connection.close()

    def time(self, study: dict[str, Any]) -> Timing:
        """Post a study and follow it to its end."""
        timing = Timing()
        cpu_s, server_cpu_s = self.watch.cpu_s(), self.watch.server_cpu_s()
        start_s = time.perf_counter()
        run = self.request("POST", "/api/runs", study)
        for event in self.events(f"/api/runs/{run['id']}/events"):
            timing.end_s = time.perf_counter() - start_s
            timing.first_s.setdefault(event, timing.end_s)
        timing.cpu_s = self.watch.cpu_s() - cpu_s
        timing.server_cpu_s = self.watch.server_cpu_s() - server_cpu_s
        state = self.request("GET", f"/api/runs/{run['id']}")
        if state["state"] != "done":
            raise RuntimeError(f"the run ended {state['state']}: {state['message']}")
        timing.points = state["progress"]["points_done"]
        timing.run = run["id"]
        return timing

    def result(self, run: str) -> StudyResult:
        """What a finished run found."""
        content = self.request("GET", f"/api/runs/{run}/result")
        with tempfile.TemporaryDirectory(prefix="crossdip-bench-") as folder:
            path = Path(folder) / "result.h5"
            path.write_bytes(content)
            return read_result(path)


@contextmanager
def served(workers: int) -> Iterator[tuple[Served, float]]:
    """A server on a free port and a folder of its own, and the time until it was ready, s."""
    with tempfile.TemporaryDirectory(prefix="crossdip-bench-") as folder:
        command = [sys.executable, "-m", "server", "serve", "--port", "0", "--data", folder]
        start_s = time.perf_counter()
        with subprocess.Popen(
            [*command, "--workers", str(workers)], stdout=subprocess.PIPE, text=True
        ) as process:
            assert process.stdout is not None
            line = process.stdout.readline()
            try:
                port = int(line.rsplit(":", 1)[1].strip().strip("/"))
                server = Served(port, process.pid)
                while server.request("GET", "/healthz")["engine"] != "ready":
                    time.sleep(POLLING_S)
                ready_s = time.perf_counter() - start_s
                server.watch.start()
                yield server, ready_s
                server.watch.stop()
            finally:
                process.terminate()
