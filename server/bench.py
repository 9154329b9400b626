"""``crossdip bench``: what this machine does, measured in one run on a server of its own.

Every row is what was measured, the figure, and the goal it is held against. Figures of speed
mean something only beside others of the same run on the same machine.
"""

import argparse
import http.client
import json
import os
import platform
import secrets
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import psutil

from server.settings import usable_cores
from solver.experiment import Study

SAMPLING_S = 0.05
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
    points: int = 0


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
        cpu_s, start_s = self.watch.cpu_s(), time.perf_counter()
        run = self.request("POST", "/api/runs", study)
        for event in self.events(f"/api/runs/{run['id']}/events"):
            timing.end_s = time.perf_counter() - start_s
            timing.first_s.setdefault(event, timing.end_s)
        timing.cpu_s = self.watch.cpu_s() - cpu_s
        state = self.request("GET", f"/api/runs/{run['id']}")
        if state["state"] != "done":
            raise RuntimeError(f"the run ended {state['state']}: {state['message']}")
        timing.points = state["progress"]["points_done"]
        return timing


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
                    time.sleep(SAMPLING_S)
                ready_s = time.perf_counter() - start_s
                server.watch.start()
                yield server, ready_s
                server.watch.stop()
            finally:
                process.terminate()


def _fresh(study: dict[str, Any]) -> dict[str, Any]:
    """The study with a seed nobody has used, so that it is computed and not looked up."""
    study["experiment"]["ensemble"]["seed"] = secrets.randbelow(2**50)
    return study


def _growth_study(realizations: int) -> dict[str, Any]:
    study = Study().model_dump(mode="json")
    study["experiment"]["ensemble"].update(
        samples=1024,
        window_ps=4096.0,
        standard_error_target=1e-5,
        min_realizations=realizations,
        max_realizations=realizations,
    )
    study["sweep"].update(points=2)
    return _fresh(study)


def _row(what: str, figure: str, goal: str = "") -> None:
    print(f"{what:<58} {figure:>12}  {goal}", flush=True)


def _headline(server: Served, workers: int) -> None:
    timing = server.time(_fresh(Study().model_dump(mode="json")))
    busy = timing.cpu_s / timing.end_s / workers
    _row("headline study, POST to the end of its stream", f"{timing.end_s:.2f} s", "10 s, later 3")
    _row("  to the first map row", f"{timing.first_s['map']:.2f} s", "0.5 s")
    _row("  to the first curve point", f"{timing.first_s['point']:.2f} s", "1 s")
    _row("  points", f"{timing.points}")
    _row("  core use, processes of the server over cores given", f"{100 * busy:.0f} %", "85 %")


def _memory(server: Served) -> None:
    megabytes = {name: size / 2**20 for name, size in server.watch.peak_bytes.items()}
    _row("peak memory of the server", f"{megabytes['server']:.0f} MB")
    _row("peak memory of the largest worker", f"{megabytes['workers']:.0f} MB")


def _growth(workers: int) -> None:
    """Memory after few and after many realizations, each on a server of its own."""
    for realizations in (256, 4096):
        with served(workers) as (server, _):
            timing = server.time(_growth_study(realizations))
            server.watch.sample()
            print(f"{realizations} realizations of each of 6 points, {timing.end_s:.1f} s:")
            _memory(server)


def main(arguments: list[str]) -> int:
    """Measure and print; exit status."""
    parser = argparse.ArgumentParser(prog="crossdip bench", description=__doc__)
    parser.add_argument("--workers", type=int, default=usable_cores())
    parser.add_argument("--repeat", type=int, default=2, help="headline runs (2)")
    parser.add_argument("--growth", action="store_true", help="also measure memory against length")
    given = parser.parse_args(arguments)
    print(f"{platform.machine()}, {os.cpu_count()} cores, Python {platform.python_version()}")
    print(f"{given.workers} workers\n")
    with served(given.workers) as (server, ready_s):
        _row("crossdip serve typed, to workers warm", f"{ready_s:.2f} s")
        for _ in range(given.repeat):
            _headline(server, given.workers)
        _memory(server)
    if given.growth:
        print()
        _growth(given.workers)
    return 0
