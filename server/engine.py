"""Where tasks are executed: the only module that knows Dask.

By default the engine starts its own cluster: single-threaded worker processes on loopback,
reached through temporary TLS credentials so that nobody else on the machine can submit code.
With an address it joins a scheduler anywhere instead, and comes back when that one does; there
only workers of the same version are given tasks.
"""

import asyncio
import concurrent.futures
import contextlib
import itertools
import logging
import os
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any, Literal

from server.errors import ServerError
from server.settings import Cluster
from server.worker import OFFER, offer, under_way

Condition = Literal["starting", "ready", "lost"]

_log = logging.getLogger("crossdip.engine")
_counter = itertools.count()
_THREAD_CAPS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")
_SETTINGS = {
    # A lost worker is not the task's fault; a task that kills ten in a row is.
    "distributed.scheduler.allowed-failures": 10,
    "distributed.nanny.pre-spawn-environ": {
        **dict.fromkeys(_THREAD_CAPS, 1),
        # Every task needs the memory that the last one freed: a worker that gives it back to
        # the system each time spends a quarter of its time on having it cleared again.
        "MALLOC_ARENA_MAX": 1,
        "MALLOC_MMAP_THRESHOLD_": 2**25,
        "MALLOC_TOP_PAD_": 2**26,
        "MALLOC_TRIM_THRESHOLD_": 2**28,
    },
    # Nothing of the cluster is to be read over HTTP, not even by this machine.
    "distributed.scheduler.http.routes": [],
    "distributed.worker.http.routes": [],
    # Nobody looks at what it measures of itself.
    "distributed.worker.profile.enabled": False,
    "distributed.admin.system-monitor.gil.enabled": False,
    "distributed.admin.system-monitor.disk": False,
    "distributed.admin.system-monitor.interval": "10s",
    "distributed.admin.tick.interval": "1s",
    # Results leave at once, so there is neither much to move about nor to watch closely.
    "distributed.scheduler.active-memory-manager.start": False,
    "distributed.worker.memory.monitor-interval": "500ms",
}
_WATCH_INTERVAL_S = 0.5
_RETRY_INTERVAL_S = 2.0
_PATIENCE_S = 2.0
_KILLING_S = 0.2


class EngineError(ServerError):
    """The engine cannot take or finish work."""

    status = 503
    code = "engine"


class Engine:
    """Runs pure functions on worker processes; survives losing a worker or the scheduler."""

    def __init__(self, workers: int, scratch: Path, cluster: Cluster | None = None) -> None:
        self._wanted_workers = workers
        self._scratch = scratch
        self._foreign = cluster or Cluster()
        self._cluster: Any = None
        self._client: Any = None
        self._ready = asyncio.Event()
        self._keeper: asyncio.Task[None] | None = None
        self._pending: set[Any] = set()
        self._chases: set[asyncio.Task[None]] = set()
        self._present: set[str] = set()
        self._accepted: set[str] = set()
        self._accepted_once = False
        self._refusal = ""
        self._trouble = ""
        self.condition: Condition = "starting"
        self.tasks_done = 0

    @property
    def workers(self) -> int:
        """Worker processes present now; on a foreign cluster, those that may be used."""
        if self._client is None or not self._ready.is_set():
            return 0
        if self._cluster is not None:
            return len(self._cluster.scheduler.workers)
        return len(self._accepted)

    def start(self, warm: Callable[[], object] | None = None) -> None:
        """Bring the workers up in the background; ``warm`` is run once on each of them."""
        self._keeper = asyncio.create_task(self._keep(warm), name="engine")

    async def stop(self) -> None:
        """End the workers this engine started; a foreign cluster is only left."""
        self._ready.clear()
        for chase in self._chases:
            chase.cancel()
        if self._keeper is not None:
            self._keeper.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await self._keeper
        with contextlib.suppress(Exception):
            await self._disconnect()
        if self._cluster is not None:
            with contextlib.suppress(Exception):
                await self._cluster.close(timeout=1.5)

    async def ready(self) -> None:
        """Wait until tasks are taken."""
        await self._ready.wait()

    async def run(self, function: Callable[..., Any], *args: Any, priority: int = 0) -> Any:
        """The function's value, computed by some worker; larger priorities go first.

        The function must be pure: it is executed again when a worker or the scheduler is lost.
        Cancelling the caller withdraws the task, and ends one of our own workers that goes on
        with it nevertheless. Raises EngineError when no worker may take it or every one dies of
        it, and what the function raises.
        """
        # A foreign scheduler may hold workers of any version: it is told which will do.
        needs = {offer(): 1} if self._foreign.address else None
        while True:
            await self._ready.wait()
            if self._refusal:
                raise EngineError(self._refusal)
            client = self._client
            future = client.submit(
                function, *args, key=f"crossdip-{next(_counter)}-{os.getpid()}",
                priority=priority, pure=False, resources=needs,
            )  # fmt: skip
            self._pending.add(future)
            waiting = asyncio.ensure_future(_value_of(future))
            try:
                # The client fetches values for all that wait in one common request. Cancelled with
                # one of them, it would take the others, and every later one, with it.
                value = await asyncio.shield(waiting)
            except asyncio.CancelledError:
                waiting.add_done_callback(_let_go)
                self._chase(future.key)
                raise
            except (concurrent.futures.CancelledError, OSError) as error:
                lost = type(error).__name__ == "CommClosedError"
                if isinstance(error, OSError) and not lost and client.status == "running":
                    raise
                # The scheduler went away; the keeper clears _ready until it is back.
                await asyncio.sleep(_WATCH_INTERVAL_S)
            except Exception as error:
                if type(error).__name__ == "KilledWorker":
                    raise EngineError(
                        "The same task ended its worker again and again, most likely for want of "
                        "memory: use fewer samples, or start the server with fewer --workers."
                    ) from error
                raise
            else:
                self.tasks_done += 1
                return value
            finally:
                # Dropping the last reference is what cancels a task that has not begun.
                self._pending.discard(future)
                future.release()

    def _chase(self, key: str) -> None:
        """Look after a cancelled task that one of our own workers may have begun."""
        task = self._cluster and self._cluster.scheduler.tasks.get(key)
        if task and task.processing_on and self._ready.is_set():
            chase = asyncio.create_task(self._end(key, task.processing_on.address))
            self._chases.add(chase)
            chase.add_done_callback(self._chases.discard)

    async def _end(self, key: str, address: str) -> None:
        """Start a worker afresh when it is still busy with a task nobody wants any more."""
        await asyncio.sleep(_PATIENCE_S)
        # A worker that is gone by then has ended the task too.
        with contextlib.suppress(Exception):
            keys = await self._client.run(under_way, workers=[address])
            if key not in keys[address]:
                return
            for nanny in self._cluster.workers.values():
                if nanny.worker_address == address:
                    # The nanny starts another process when this one is gone.
                    await nanny.kill(timeout=_KILLING_S, reason="a task that was cancelled")

    async def _keep(self, warm: Callable[[], object] | None) -> None:
        """Connect, watch, connect again, until stopped."""
        while True:
            try:
                await self._connect(warm)
            except asyncio.CancelledError:
                raise
            except Exception as error:
                if not self._foreign.address:
                    _log.exception("the local workers did not start")
                elif str(error) != self._trouble:
                    self._trouble = str(error)
                    _log.warning("no scheduler at %s yet: %s", self._foreign.address, error)
                self.condition = "lost"
                with contextlib.suppress(Exception):
                    await self._disconnect()
                await asyncio.sleep(_RETRY_INTERVAL_S)
                continue
            while self._client.status in {"running", "connecting"}:
                connected = self._client.status == "running"
                self.condition = "ready" if connected else "lost"
                if connected:
                    if self._cluster is None:
                        with contextlib.suppress(OSError):
                            await self._survey()
                    self._ready.set()
                else:
                    self._ready.clear()
                await asyncio.sleep(_WATCH_INTERVAL_S)
            self._ready.clear()
            self.condition = "lost"
            with contextlib.suppress(Exception):
                await self._disconnect()

    async def _connect(self, warm: Callable[[], object] | None) -> None:
        for name in _THREAD_CAPS:
            os.environ.setdefault(name, "1")
        # The import takes a third of a second: the page is served meanwhile.
        distributed = await asyncio.to_thread(_load)
        if self._foreign.address:
            self._client = await distributed.Client(
                self._foreign.address,
                security=_security(distributed, self._foreign),
                asynchronous=True,
                set_as_default=False,
                timeout=5,
            )
            self._trouble = ""
            self._present, self._accepted = set(), set()
            await self._survey()
        else:
            if self._cluster is None:
                self._cluster = await self._local_cluster(distributed)
            _, within = self._cluster.scheduler.listeners
            self._client = await distributed.Client(
                within.contact_address,
                security=self._cluster.security,
                asynchronous=True,
                set_as_default=False,
            )
        if warm is not None and not self._foreign.address:
            await self._warm(warm)
        self.condition = "ready"
        self._ready.set()

    async def _survey(self) -> None:
        """See which workers of a foreign cluster may be used; tell of any other one once."""
        present = set(await self._client.ncores())
        if present == self._present:
            return
        identity = await self._client.scheduler.identity(n_workers=-1)
        workers = identity["workers"]
        reasons = {
            address: reason
            for address, worker in workers.items()
            if (reason := _objection(address, worker["resources"]))
        }
        for address in reasons.keys() - self._present:
            _log.warning("%s", reasons[address])
        self._present = present
        self._accepted = workers.keys() - reasons.keys()
        # Good workers that were there before may come back; without any, nobody would be told.
        if self._accepted:
            self._refusal, self._accepted_once = "", True
        elif not self._accepted_once:
            self._refusal = next(iter(reasons.values()), "")
            if self._refusal:
                # What waits for a worker is to hear of it, not to wait for ever.
                await self._client.cancel(list(self._pending))

    async def _local_cluster(self, distributed: Any) -> Any:
        import dask

        logging.getLogger("distributed").setLevel(logging.ERROR)
        dask.config.set(_SETTINGS)
        self._scratch.mkdir(parents=True, exist_ok=True)
        return await distributed.LocalCluster(
            n_workers=self._wanted_workers,
            threads_per_worker=1,
            processes=True,
            host="127.0.0.1",
            dashboard_address=None,
            scheduler_kwargs={
                "dashboard": False,
                "dashboard_address": "127.0.0.1:0",
                # Workers come by TLS; the client lives in this process and needs no socket.
                "protocol": ["tls", "inproc"],
                "host": ["127.0.0.1", None],
            },
            asynchronous=True,
            security=distributed.Security.temporary(),
            local_directory=str(self._scratch),
            preload=["server.worker"],
            # Whoever waits for a task hears of its errors; an ended worker has nothing to say.
            silence_logs=logging.CRITICAL,
        )

    async def _warm(self, warm: Callable[[], object]) -> None:
        addresses = list(self._cluster.scheduler.workers)
        futures = [
            self._client.submit(warm, workers=[address], allow_other_workers=True, pure=False)
            for address in addresses
        ]
        try:
            for future in futures:
                await future
        except Exception:
            # The first real task will meet the same fault and report it to a person.
            _log.exception("warming the workers failed")
        finally:
            for future in futures:
                future.release()

    async def _disconnect(self) -> None:
        client, self._client = self._client, None
        if client is not None:
            await client.close()


async def _value_of(future: Any) -> Any:
    return await future


def _let_go(waiting: asyncio.Future[Any]) -> None:
    """Take note of how a wait ended that nobody is interested in any more."""
    if not waiting.cancelled():
        waiting.exception()


def _objection(address: str, resources: Iterable[str]) -> str:
    """Why a worker of a foreign cluster gets no tasks; empty when it does."""
    offers = [name for name in resources if name.startswith(OFFER)]
    if offer() in offers:
        return ""
    if not offers:
        return (
            f"the worker {address} does not say which version of Crossdip it has, and this is "
            f"{offer()}: install this version there and start it with --preload server.worker"
        )
    return (
        f"the worker {address} has {offers[0]}, but this is {offer()}: "
        "install the same version on both machines, then start that worker again"
    )


def _security(distributed: Any, cluster: Cluster) -> Any:
    if cluster.ca is None:
        return None
    return distributed.Security(
        tls_ca_file=str(cluster.ca),
        tls_client_cert=str(cluster.certificate),
        tls_client_key=str(cluster.key),
        require_encryption=True,
    )


def _load() -> Any:
    import distributed

    return distributed
