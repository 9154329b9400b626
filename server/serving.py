"""``crossdip serve``: claim the folder and the port, say where to look, serve, stop cleanly."""

import asyncio
import logging
import os
import signal
import socket
import sqlite3
import sys
from collections.abc import Mapping
from types import FrameType
from urllib.parse import quote

import uvicorn

from server.access import establish_keys
from server.app import create_app
from server.errors import SettingsError
from server.settings import Settings, read_settings
from server.storage import Storage, claim_folder

GRACE_S = 2


class _Announcing(uvicorn.Server):
    """Says where to look once it listens, and ends open streams as soon as it is told to stop."""

    def __init__(self, config: uvicorn.Config, lines: list[str]) -> None:
        super().__init__(config)
        self._lines = lines
        self._loop: asyncio.AbstractEventLoop | None = None

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        self._loop = asyncio.get_running_loop()
        await super().startup(sockets)
        if self.started and not self.should_exit:
            print("\n".join(self._lines), flush=True)

    def handle_exit(self, sig: int, frame: FrameType | None) -> None:
        super().handle_exit(sig, frame)
        board = getattr(self.config.app.state, "board", None)  # type: ignore[union-attr]
        if board is not None and self._loop is not None:
            self._loop.call_soon_threadsafe(board.close)


def serve(flags: Mapping[str, object], environment: Mapping[str, str]) -> int:
    """Serve until told to stop; raises SettingsError with one line when it cannot begin."""
    settings = read_settings(flags, environment)
    logging.basicConfig(level=logging.WARNING, format="%(asctime)s %(name)s: %(message)s")
    try:
        held = claim_folder(settings.data)
    except BlockingIOError:
        raise SettingsError(
            f"another Crossdip server uses the data folder {settings.data}: stop it, or choose "
            "another folder with --data"
        ) from None
    except OSError as error:
        raise SettingsError(
            f"the data folder {settings.data} cannot be used ({error.strerror}): choose another "
            "with --data"
        ) from None
    with held:
        try:
            storage = Storage(settings.data / "crossdip.sqlite3")
        except sqlite3.Error as error:
            raise SettingsError(
                f"the database in {settings.data} cannot be opened: {error}"
            ) from None
        with _listen(settings) as listening:
            # After the port is ours: links that nobody can open must not end older ones.
            keys = establish_keys(settings, storage)
            config = uvicorn.Config(
                create_app(settings, storage),
                log_level="warning",
                # The log would hold the access keys of the links that are opened.
                access_log=False,
                server_header=False,
                timeout_graceful_shutdown=GRACE_S,
                lifespan="on",
            )
            port = int(listening.getsockname()[1])
            server = _Announcing(config, start_lines(settings, port, keys))
            # uvicorn raises the signal again when it has stopped; that must not end us before
            # the exit status is set.
            signal.signal(signal.SIGTERM, lambda number, frame: sys.exit(0))
            server.run(sockets=[listening])
            return 0 if server.started else 1


def start_lines(settings: Settings, port: int, keys: Mapping[str, str]) -> list[str]:
    """What the operator reads: the address, and the links to hand out."""
    if settings.loopback:
        name = f"[{settings.host}]" if ":" in settings.host else settings.host
        return [f"Crossdip is ready: http://{name}:{port}/"]
    base = f"http://{_reachable(settings.host)}:{port}/"
    lines = [f"Crossdip is ready: {base}"]
    if keys:
        lines.append(f"  full access: {base}enter?key={quote(keys['write'])}")
        lines.append(f"  look only:   {base}enter?key={quote(keys['look'])}")
    else:
        lines.append("  the links handed out before still work; --new-access-key makes new ones")
    return lines


def _listen(settings: Settings) -> socket.socket:
    try:
        family = socket.getaddrinfo(settings.host, settings.port, type=socket.SOCK_STREAM)[0][0]
        return socket.create_server((settings.host, settings.port), family=family, backlog=512)
    except socket.gaierror:
        raise SettingsError(
            f"{settings.host} is not an address of this machine: give one of its own with --host"
        ) from None
    except OSError as error:
        reason = os.strerror(error.errno) if error.errno and error.errno > 0 else error.strerror
        raise SettingsError(
            f"cannot listen on {settings.host} port {settings.port} ({reason}): is "
            "another server there? Choose another port with --port, or 0 for a free one"
        ) from None


def _reachable(host: str) -> str:
    """The name others can use; a wildcard becomes the address of the default route."""
    if host in {"0.0.0.0", "::"}:
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as probe:
            try:
                # Connecting a datagram socket sends nothing; it only chooses a route.
                probe.connect(("192.0.2.1", 9))
                return str(probe.getsockname()[0])
            except OSError:
                return socket.gethostname()
    return f"[{host}]" if ":" in host else host
