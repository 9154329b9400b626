"""Who may do what.

On loopback only this machine can connect, so no key is asked for; what remains is a web page
elsewhere that drives the user's own browser. Two checks stop it: the Host header must name this
machine (a name rebound to 127.0.0.1 does not), and a request that changes something must come
from a page of this server (Origin and Sec-Fetch-Site).

On any other address a key is needed as well: one that may write, one that may only look. Keys
are kept as salted scrypt hashes. A key is shown once, in a link; the browser then holds a random
cookie, of which the server keeps the SHA-256. Cookies are HttpOnly and SameSite=Strict, so no
script reads them, no other site sends them, and a rebound name has none. Wrong keys are counted
and slowed down. Traffic is not encrypted: on a network that is not trusted, put a TLS proxy in
front.
"""

import asyncio
import hashlib
import hmac
import secrets
import time
from collections import OrderedDict
from datetime import UTC, datetime, timedelta
from html import escape
from http.cookies import CookieError, SimpleCookie
from urllib.parse import parse_qs, quote

from starlette.datastructures import Headers
from starlette.requests import Request
from starlette.responses import HTMLResponse, RedirectResponse, Response
from starlette.types import ASGIApp, Receive, Scope, Send

from server.errors import (
    Forbidden,
    NotSignedIn,
    ServerError,
    SettingsError,
    TooManyAttempts,
    error_response,
)
from server.settings import Settings
from server.storage import KeyRecord, Storage

COOKIE = "crossdip"
COOKIE_PERIOD = timedelta(days=30)
ATTEMPTS = 8
ATTEMPT_PERIOD_S = 60.0
SAFE_METHODS = frozenset({"GET", "HEAD", "OPTIONS"})
LOCAL_NAMES = frozenset({"localhost", "127.0.0.1", "[::1]"})
_OPEN_PATHS = frozenset({"/enter", "/healthz", "/favicon.ico"})
_LOOK_SALT = b"crossdip look-only key"


def _scrypt(text: str, salt: bytes) -> bytes:
    return hashlib.scrypt(text.encode(), salt=salt, n=2**14, r=8, p=1, dklen=32)


def look_key_of(key: str) -> str:
    """The look-only key that belongs to a full key; the way back is as hard as guessing."""
    return _scrypt(key, _LOOK_SALT).hex()[:24]


def _record(may: str, key: str) -> KeyRecord:
    salt = secrets.token_bytes(16)
    return KeyRecord(may, salt, _scrypt(key, salt))


def _matches(record: KeyRecord, key: str) -> bool:
    return hmac.compare_digest(_scrypt(key, record.salt), record.hash)


def establish_keys(settings: Settings, storage: Storage) -> dict[str, str]:
    """The keys to print in links, {"write": …, "look": …}; empty when none are new or needed.

    Raises SettingsError when the address needs a key and there is none.
    """
    key = secrets.token_urlsafe(18) if settings.new_access_key else settings.access_key
    stored = {record.may: record for record in storage.access_keys()}
    if key:
        keys = {"write": key, "look": look_key_of(key)}
        if not ("write" in stored and _matches(stored["write"], key)):
            storage.replace_keys([_record(may, text) for may, text in keys.items()])
        return keys
    if not settings.loopback and not stored:
        raise SettingsError(
            f"{settings.host} can be reached from the network, so an access key is needed: "
            "add --new-access-key to make one, or set CROSSDIP_ACCESS_KEY"
        )
    return {}


class Attempts:
    """Wrong keys by client address, forgotten after a while; bounded."""

    def __init__(self) -> None:
        self._failures: OrderedDict[str, list[float]] = OrderedDict()

    def check(self, client: str) -> None:
        """Raise TooManyAttempts while a client has to wait."""
        moment_s = time.monotonic()
        recent = [
            failed_s
            for failed_s in self._failures.get(client, [])
            if moment_s - failed_s < ATTEMPT_PERIOD_S
        ]
        if len(recent) >= ATTEMPTS:
            raise TooManyAttempts("too many wrong keys from this address: wait a minute")

    def failed(self, client: str) -> None:
        """Count a wrong key."""
        self._failures[client] = [*self._failures.pop(client, []), time.monotonic()][-ATTEMPTS:]
        while len(self._failures) > 1000:
            self._failures.popitem(last=False)


class Gate:
    """The outermost part of the application: lets a request in or answers it."""

    def __init__(self, app: ASGIApp, settings: Settings, storage: Storage) -> None:
        self._app = app
        self._loopback = settings.loopback
        self._names = LOCAL_NAMES | {settings.host}
        self._storage = storage
        self._attempts = Attempts()
        self._hashing = asyncio.Lock()

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI entry."""
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        request = Request(scope, receive)
        try:
            self._check_sender(request)
            answer = await self._admit(request)
        except ServerError as error:
            answer = error_response(error)
        await (answer or self._app)(scope, receive, send)

    def _check_sender(self, request: Request) -> None:
        headers = request.headers
        host = headers.get("host", "")
        if self._loopback and _name_of(host) not in self._names:
            raise Forbidden(
                "this server answers to localhost and 127.0.0.1 only: open it under one of these"
            )
        if request.method in SAFE_METHODS:
            return
        origin = headers.get("origin")
        foreign = origin is not None and origin.partition("://")[2] != host
        if foreign or headers.get("sec-fetch-site", "same-origin") not in {"same-origin", "none"}:
            raise Forbidden("the request came from a page of another site: use this server's pages")

    async def _admit(self, request: Request) -> Response | None:
        """None lets the request through; otherwise the answer."""
        path = request.url.path
        if path == "/enter":
            answer = await self._enter(request)
            if answer is not None:
                return answer
        may = "write" if self._loopback else await self._permission(request.headers)
        request.scope.setdefault("state", {})["may"] = may
        if may is None:
            if path in _OPEN_PATHS or path.startswith("/static/"):
                return None
            if path.startswith("/api/") or "text/html" not in request.headers.get("accept", ""):
                raise NotSignedIn("open the link with the access key that you were given")
            if request.headers.get("sec-fetch-site") == "cross-site":
                # A strict cookie stays at home on a click from another site: come in again.
                return _arrive(request.url.path, request.url.query)
            return RedirectResponse("/enter", 303)
        if may != "write" and request.method not in SAFE_METHODS:
            raise Forbidden("this access key may only look: ask for the key that may change things")
        return None

    async def _permission(self, headers: Headers) -> str | None:
        try:
            cookie = SimpleCookie(headers.get("cookie", "")).get(COOKIE)
        except CookieError:
            return None
        if cookie is None:
            return None
        digest = hashlib.sha256(cookie.value.encode()).digest()
        return await asyncio.to_thread(self._storage.cookie, digest)

    async def _enter(self, request: Request) -> Response | None:
        """Exchange a key, from the link or the form, for a cookie."""
        if request.method == "POST":
            key = (parse_qs((await request.body()).decode("utf-8", "replace")).get("key") or [""])[
                0
            ]
        else:
            key = request.query_params.get("key", "")
            if not key and "key" not in request.query_params:
                return RedirectResponse("/", 303) if self._loopback else None
        if self._loopback:
            return RedirectResponse("/", 303)
        client = request.client.host if request.client else ""
        try:
            self._attempts.check(client)
        except TooManyAttempts:
            return RedirectResponse("/enter?refused=wait", 303)
        may = await self._verify(key.strip()[:200])
        if may is None:
            self._attempts.failed(client)
            return RedirectResponse("/enter?refused=key", 303)
        token = secrets.token_urlsafe(32)
        expires = (datetime.now(UTC) + COOKIE_PERIOD).isoformat(timespec="microseconds")
        digest = hashlib.sha256(token.encode()).digest()
        await asyncio.to_thread(
            self._storage.add_cookie, digest, may, expires.replace("+00:00", "Z")
        )
        answer = _arrive("/")
        answer.set_cookie(
            COOKIE,
            token,
            max_age=int(COOKIE_PERIOD.total_seconds()),
            httponly=True,
            samesite="strict",
        )
        return answer

    async def _verify(self, key: str) -> str | None:
        # One at a time: hashing is slow on purpose, and guessing must not fill every core.
        async with self._hashing:
            for record in await asyncio.to_thread(self._storage.access_keys):
                if await asyncio.to_thread(_matches, record, key):
                    return record.may
        return None


def _name_of(host: str) -> str:
    """The Host header without its port."""
    return host.partition("]")[0] + "]" if host.startswith("[") else host.partition(":")[0]


def _arrive(path: str, query: str = "") -> Response:
    """A page that leads on at once: a redirect would still count as the other site's request."""
    target = "/" + quote(path.lstrip("/")) + (f"?{quote(query, safe='=&:%+')}" if query else "")
    target = escape(target)
    return HTMLResponse(
        '<!doctype html><html lang="en"><head><meta charset="utf-8"><title>Crossdip</title>'
        f'<meta http-equiv="refresh" content="0;url={target}"></head>'
        f'<body><p><a href="{target}">Continue to Crossdip</a></p></body></html>',
        headers={"Cache-Control": "no-store"},
    )
