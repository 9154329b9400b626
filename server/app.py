"""The application: everything put together."""

import asyncio
import logging
import sqlite3
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from functools import partial

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse, Response
from starlette.exceptions import HTTPException
from starlette.middleware.gzip import GZipMiddleware

from server.access import Gate
from server.engine import Engine
from server.errors import DiskFull, ServerError, error_response
from server.lifecycle import IllegalTransition
from server.middleware import SECURITY_HEADERS, BodyLimit, SecurityHeaders
from server.routes import fibres, overlay, pages, plan, runs, sessions, spectra, system
from server.runs import Runs
from server.schemas import ErrorBody
from server.sessions import Sessions
from server.settings import Settings
from server.storage import Storage
from server.stream import Board
from server.validation import first_problem
from server.wording import is_full_disk
from solver.experiment import Study
from solver.study import plan_transforms, prepare

_log = logging.getLogger("crossdip")

AFTER_ALL_ELSE = -(10**9)
"""Priority of what may wait as long as there is anything else to do."""
_HTTP_CODES = {404: "not_found", 405: "method_not_allowed"}
_HTTP_MESSAGES = {
    404: "there is nothing at this address: see /openapi.json for what there is",
    405: "this address does not take this method: see /openapi.json",
}
_ERRORS: dict[int | str, dict[str, object]] = {
    "4XX": {"model": ErrorBody, "description": "What was wrong, where, and what to do"},
    "5XX": {"model": ErrorBody, "description": "The server's fault"},
}


def create_app(settings: Settings, storage: Storage | None = None) -> FastAPI:
    """The server of one data folder, not yet started."""
    settings.data.mkdir(parents=True, exist_ok=True)
    database = storage or Storage(settings.data / "crossdip.sqlite3")

    @asynccontextmanager
    async def lifespan(app: FastAPI) -> AsyncIterator[None]:
        engine = Engine(settings.workers, settings.data / "scratch", settings.cluster)
        board = Board()
        all_runs = Runs(database, engine, board, settings)
        app.state.engine = engine
        app.state.board = board
        app.state.runs = all_runs
        app.state.sessions = Sessions(database, all_runs)
        engine.start(partial(prepare, Study()))
        await all_runs.open()
        planning = asyncio.create_task(_plan_while_idle(engine, settings))
        try:
            yield
        finally:
            planning.cancel()
            await asyncio.gather(planning, return_exceptions=True)
            board.close()
            await all_runs.close()
            await engine.stop()
            database.close()

    app = FastAPI(
        title="Crossdip",
        description="Polarization domains of partially coherent waves: runs, results, sessions.",
        version="0.1.0",
        lifespan=lifespan,
        # The interactive pages load scripts from elsewhere; the description itself is enough.
        docs_url=None,
        redoc_url=None,
        responses=_ERRORS,
    )
    app.state.settings = settings
    _handle_errors(app)
    for module in (runs, plan, sessions, overlay, spectra, fibres, system, pages):
        app.include_router(module.router)
    pages.mount(app)
    # The last one added is the outermost.
    app.add_middleware(GZipMiddleware, minimum_size=1000, compresslevel=5)
    app.add_middleware(Gate, settings=settings, storage=database)
    app.add_middleware(BodyLimit)
    app.add_middleware(SecurityHeaders)
    return app


async def _plan_while_idle(engine: Engine, settings: Settings) -> None:
    """Have transforms planned that most studies need: half a second each, once on a machine."""
    place, more = 0, not settings.cluster.address
    while more:
        more = await engine.run(plan_transforms, Study(), place, priority=AFTER_ALL_ELSE)
        place += 1


def _handle_errors(app: FastAPI) -> None:
    @app.exception_handler(ServerError)
    async def expected(request: Request, error: ServerError) -> JSONResponse:
        return error_response(error)

    @app.exception_handler(IllegalTransition)
    async def illegal(request: Request, error: IllegalTransition) -> JSONResponse:
        conflict = ServerError(str(error))
        conflict.status, conflict.code = 409, "conflict"
        return error_response(conflict)

    @app.exception_handler(sqlite3.OperationalError)
    async def unwritable(request: Request, error: sqlite3.OperationalError) -> JSONResponse:
        if not is_full_disk(error):
            raise error
        return error_response(
            DiskFull("the disk that holds the data folder is full: free some space, then try again")
        )

    @app.exception_handler(RequestValidationError)
    async def invalid(request: Request, error: RequestValidationError) -> JSONResponse:
        takes_study = request.method == "POST" and request.url.path in ("/api/runs", "/api/plan")
        root = Study if takes_study else None
        return error_response(first_problem(error.errors(), root))

    @app.exception_handler(HTTPException)
    async def http(request: Request, error: HTTPException) -> Response:
        status = error.status_code
        if status == 404 and pages.is_for_a_person(request):
            return pages.missing(request)
        failure = ServerError(_HTTP_MESSAGES.get(status, str(error.detail)))
        failure.status, failure.code = status, _HTTP_CODES.get(status, "bad_request")
        return error_response(failure, dict(error.headers or {}))

    @app.exception_handler(Exception)
    async def unexpected(request: Request, error: Exception) -> JSONResponse:
        _log.error("%s %s", request.method, request.url.path, exc_info=error)
        return error_response(
            ServerError("the server made a mistake; its log has the details. Try again"),
            SECURITY_HEADERS,
        )
