"""A real server process for tests, and a plain reader of event streams."""

import json
import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx

ROOT = Path(__file__).parent.parent
TIMEOUT_S = 90.0

TINY: dict[str, Any] = {
    "experiment": {
        "line": [
            {
                "length_km": 2.0,
                "dispersion_ps_per_nm_km": -13.0,
                "gamma_per_w_km": 2.5,
            }
        ],
        "ensemble": {
            "window_ps": 1024.0,
            "samples": 512,
            "min_realizations": 4,
            "max_realizations": 8,
            "distances": 4,
            "max_lag_ps": 100.0,
        },
    },
    "sweep": {"start": 10.0, "stop": 200.0, "points": 2},
    "variants": [
        {"name": "coupled", "changes": {"relation.kind": "derivative"}},
        {"name": "uncoupled", "changes": {"line.*.coupling": "uncoupled"}},
    ],
}


def tiny(seed: int = 1, **ensemble: Any) -> dict[str, Any]:
    """A study of four points that takes about a second, told from others by its seed."""
    study: dict[str, Any] = json.loads(json.dumps(TINY))
    study["experiment"]["ensemble"] |= {"seed": seed, **ensemble}
    return study


def lengthy(seed: int) -> dict[str, Any]:
    """A study that runs for many seconds, so that a test can interfere."""
    study = tiny(
        seed, standard_error_target=1e-5, max_realizations=4000, samples=1024, window_ps=2048.0
    )
    study["sweep"]["points"] = 4
    return study


def crossdip(*arguments: str) -> subprocess.CompletedProcess[str]:
    """A command line run to its end."""
    return subprocess.run(
        [sys.executable, "-m", "server", *arguments],
        cwd=ROOT,
        env=_environment(),
        capture_output=True,
        text=True,
        timeout=2 * TIMEOUT_S,
        check=False,
    )


def _environment() -> dict[str, str]:
    return {k: v for k, v in os.environ.items() if not k.startswith("CROSSDIP_")}


@dataclass(frozen=True)
class Event:
    """One event as it came over the wire."""

    id: str
    kind: str
    data: dict[str, Any]


class LiveServer:
    """``crossdip serve`` in a process of its own."""

    def __init__(self, data: Path, *flags: str, host: str = "127.0.0.1") -> None:
        self.data = data
        self._flags = [*flags, "--host", host]
        self._process: subprocess.Popen[str] | None = None
        self.url = ""
        self.lines: list[str] = []
        self.client = httpx.Client(timeout=TIMEOUT_S)

    @property
    def pid(self) -> int:
        """Process id of the server."""
        assert self._process is not None
        return self._process.pid

    def start(self, *extra: str) -> None:
        """Start, again if need be, and wait until it listens."""
        self._forget()
        command = [sys.executable, "-m", "server", "serve", "--port", "0", "--data", str(self.data)]
        self._process = subprocess.Popen(
            [*command, "--workers", "2", *self._flags, *extra],
            cwd=ROOT,
            env=_environment(),
            stdout=subprocess.PIPE,
            text=True,
        )
        assert self._process.stdout is not None
        line = self._process.stdout.readline()
        found = re.search(r"http://\S+:(\d+)/", line)
        assert found, f"the server did not start: {line!r}"
        self.lines = [line]
        self.url = f"http://127.0.0.1:{found[1]}"
        self.client.base_url = httpx.URL(self.url)

    def read_line(self) -> str:
        """The next line of standard output."""
        assert self._process is not None
        assert self._process.stdout is not None
        return self._process.stdout.readline()

    def signal(self, number: signal.Signals) -> int:
        """Send a signal and wait; the exit status."""
        assert self._process is not None
        self._process.send_signal(number)
        return self._process.wait(TIMEOUT_S)

    def stop(self) -> None:
        """End the process if it still runs."""
        if self._process is not None:
            if self._process.poll() is None:
                self.signal(signal.SIGTERM)
            self._forget()
        self.client.close()

    def _forget(self) -> None:
        if self._process is not None and self._process.stdout is not None:
            self._process.stdout.close()
        self._process = None

    def get(self, path: str, **options: Any) -> Any:
        """The JSON body of a GET that must succeed."""
        response = self.client.get(path, **options)
        assert response.status_code == 200, response.text
        return response.json()

    def post(self, study: dict[str, Any]) -> str:
        """Ask for a study; its identity."""
        response = self.client.post("/api/runs", json=study)
        assert response.status_code in (200, 201), response.text
        return str(response.json()["id"])

    def events(self, run_id: str, after: str = "") -> Iterator[Event]:
        """The run's events until the server ends the stream."""
        headers = {"Last-Event-ID": after} if after else {}
        path = f"/api/runs/{run_id}/events"
        with self.client.stream("GET", path, headers=headers) as response:
            assert response.status_code == 200
            assert response.headers["content-type"].startswith("text/event-stream")
            fields: dict[str, str] = {}
            for line in response.iter_lines():
                if line:
                    name, _, value = line.partition(": ")
                    fields[name] = value
                elif "data" in fields:
                    yield Event(fields["id"], fields["event"], json.loads(fields["data"]))
                    fields = {}

    def wait(self, run_id: str, *states: str, timeout_s: float = TIMEOUT_S) -> dict[str, Any]:
        """Wait until a run is in one of the states; its row."""
        end_s = time.monotonic() + timeout_s
        while True:
            row: dict[str, Any] = self.get(f"/api/runs/{run_id}")
            if row["state"] in states:
                return row
            assert time.monotonic() < end_s, row
            time.sleep(0.05)

    def wait_for_progress(self, run_id: str, realizations: int) -> None:
        """Wait until a running run has computed some realizations."""
        end_s = time.monotonic() + TIMEOUT_S
        while self.get(f"/api/runs/{run_id}")["progress"]["realizations"] < realizations:
            assert time.monotonic() < end_s
            time.sleep(0.05)
