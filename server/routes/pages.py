"""The HTML pages and everything they load: templates, static files, the plotting library.

Static files live under a URL that holds a hash of their content, so a browser may keep them for
ever and still never sees a stale one.
"""

import gzip
import hashlib
import re
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

from fastapi import APIRouter, FastAPI, Request, Response
from fastapi.responses import HTMLResponse
from fastapi.templating import Jinja2Templates
from jinja2 import Environment, FileSystemLoader, StrictUndefined
from starlette.datastructures import Headers
from starlette.staticfiles import StaticFiles
from starlette.types import Scope

from server import form

WEB = Path(str(files("web")))
TOPICS = [
    ("correlations", "Correlations"),
    ("line", "Along the line"),
    ("spectra", "Spectra"),
    ("domains", "Domains"),
    ("polarization", "Polarization"),
    ("intensities", "Intensities"),
    ("budget", "Error budget"),
]
"""What the page shows of a point, one topic at a time."""
IMMUTABLE = "public, max-age=31536000, immutable"

router = APIRouter(include_in_schema=False, default_response_class=HTMLResponse)


@cache
def _static_hash() -> str:
    digest = hashlib.sha256()
    root = WEB / "static"
    for path in sorted(root.rglob("*")):
        if path.is_file():
            digest.update(path.relative_to(root).as_posix().encode() + b"\0")
            digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def static_url(path: str) -> str:
    """URL of a file below web/static."""
    return f"/static/{_static_hash()}/{path}"


def _plotly_source() -> Path:
    return Path(str(files("plotly"))) / "package_data" / "plotly.min.js"


@cache
def plotly_url() -> str:
    """URL of the plotting library, from its size and date: hashing 5 MB would delay the start."""
    status = _plotly_source().stat()
    mark = hashlib.sha256(f"{status.st_size}-{status.st_mtime_ns}".encode()).hexdigest()[:16]
    return f"/static/plotly-{mark}.js"


@cache
def _plotly_compressed() -> bytes:
    return gzip.compress(_plotly_source().read_bytes(), compresslevel=6, mtime=0)


@cache
def _library_styles() -> list[str]:
    """Identities of the style sheets that the plotting library would put into the page.

    They belong to street maps, which no plot here is; the page's policy refuses them, loudly.
    An element of the same identity keeps the library from trying.
    """
    source = _plotly_source().read_text(encoding="utf-8")
    return re.findall(r'getElementById\("([0-9a-f]{32,})"\)', source)


def _modules(page: str) -> list[str]:
    """Modules that a page loads, for the preload hints: its own and every shared one."""
    root = WEB / "static" / "js"
    shared = [*root.glob("model/*.js"), *root.glob("plots/*.js")] if page else []
    return [static_url(path.relative_to(WEB / "static").as_posix()) for path in sorted(shared)]


def _environment() -> Environment:
    environment = Environment(
        loader=FileSystemLoader(WEB / "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals.update(
        static=static_url,
        plotly=plotly_url,
        modules=_modules,
        library_styles=_library_styles,
        choices_of=form.choices_of,
        spectrum_choices=form.spectrum_choices(),
    )
    return environment


_templates = Jinja2Templates(env=_environment())


def _page(request: Request, name: str, **context: Any) -> Response:
    return _templates.TemplateResponse(
        request, f"{name}.html", context, headers={"Cache-Control": "no-cache"}
    )


def _bench(request: Request, *, shows_run: bool) -> Response:
    context = {
        "sections": form.sections(),
        "data": form.page_data(),
        "topics": TOPICS,
        "shows_run": shows_run,
    }
    return _page(request, "bench", **context)


@router.get("/")
def bench(request: Request) -> Response:
    """The bench with nothing run yet."""
    return _bench(request, shows_run=False)


@router.get("/runs/{identity}")
def bench_of_run(request: Request, identity: str) -> Response:
    """The bench showing one run; its script reads the identity from the address."""
    return _bench(request, shows_run=True)


@router.get("/library")
def library(request: Request) -> Response:
    """Every saved run."""
    return _page(request, "library")


@router.get("/sessions")
def sessions(request: Request) -> Response:
    """Every session."""
    return _page(request, "sessions")


@router.get("/sessions/{identity}")
def session(request: Request, identity: str) -> Response:
    """One session: its runs and notes."""
    return _page(request, "session")


@router.get("/overlay")
def overlay(request: Request) -> Response:
    """Chosen curves on one set of axes; the choice stands in the address."""
    return _page(request, "overlay")


REFUSALS = {
    "key": "This key is not known here: look at the link again, or ask for a new one.",
    "wait": "Too many attempts: wait a minute, then try again.",
}


@router.get("/enter")
def enter(request: Request, refused: str = "") -> Response:
    """Where the access key is asked for; the exchange for a cookie is the gate's."""
    return _page(request, "enter", problem=REFUSALS.get(refused, ""))


def is_for_a_person(request: Request) -> bool:
    """Whether a request is a browser's for a page, not a script's for data."""
    asked = request.headers.get("accept", "")
    return "text/html" in asked and not request.url.path.startswith(("/api/", "/static/"))


def missing(request: Request) -> Response:
    """What a person sees at an address that leads nowhere."""
    response = _page(request, "missing")
    response.status_code = 404
    return response


@router.get("/favicon.ico")
def favicon() -> Response:
    """The mark, for browsers that ask for it by its old name."""
    return Response(
        (WEB / "static" / "mark.svg").read_bytes(),
        media_type="image/svg+xml",
        headers={"Cache-Control": "public, max-age=86400"},
    )


class _ImmutableFiles(StaticFiles):
    async def get_response(self, path: str, scope: Scope) -> Response:
        response = await super().get_response(path, scope)
        if response.status_code in (200, 304):
            response.headers["Cache-Control"] = IMMUTABLE
        return response


def _plotly(request: Request) -> Response:
    headers = {"Cache-Control": IMMUTABLE, "Vary": "Accept-Encoding"}
    if "gzip" in Headers(scope=request.scope).get("accept-encoding", ""):
        headers["Content-Encoding"] = "gzip"
        body = _plotly_compressed()
    else:
        body = _plotly_source().read_bytes()
    return Response(body, media_type="text/javascript", headers=headers)


def mount(app: FastAPI) -> None:
    """Serve the static files and the plotting library from ``app``."""
    app.add_api_route(plotly_url(), _plotly, methods=["GET"], include_in_schema=False)
    app.mount(f"/static/{_static_hash()}", _ImmutableFiles(directory=WEB / "static"), "static")
