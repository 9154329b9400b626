"""What applies to every request and response."""

from starlette.datastructures import MutableHeaders
from starlette.requests import ClientDisconnect
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from server.errors import TooLarge, error_response

BODY_LIMIT_BYTES = 1_048_576
DRAIN_LIMIT_BYTES = 33_554_432
UPLOAD_LIMIT_BYTES = 40 * 1_048_576
UPLOADS = frozenset({"/api/spectra"})
"""Where files arrive. Their bodies are read by the route, after the gate, and not here."""

SECURITY_HEADERS = {
    # The hash is that of an empty style element, which the plotting library inserts and then
    # fills through the object model; it also sets style attributes.
    "Content-Security-Policy": (
        "default-src 'none'; script-src 'self'; "
        "style-src 'self' 'sha256-47DEQpj8HBSa+/TImW+5JCeuQeRkm5NMpJWZG3hSuFU='; "
        "style-src-attr 'unsafe-inline'; img-src 'self' data: blob:; connect-src 'self'; "
        "base-uri 'none'; form-action 'self'; frame-ancestors 'none'"
    ),
    "X-Content-Type-Options": "nosniff",
    # Not no-referrer: under it browsers send "Origin: null" with a form of our own.
    "Referrer-Policy": "same-origin",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Permissions-Policy": "camera=(), microphone=(), geolocation=()",
}


class SecurityHeaders:
    """Adds the headers to every response, errors included."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI entry."""

        async def send_with_headers(message: Message) -> None:
            if message["type"] == "http.response.start":
                headers = MutableHeaders(scope=message)
                for name, value in SECURITY_HEADERS.items():
                    headers.setdefault(name, value)
                headers.setdefault("Cache-Control", "no-cache")
            await send(message)

        await self._app(scope, receive, send_with_headers if scope["type"] == "http" else send)


class BodyLimit:
    """Reads the whole body first, and refuses it when it is too large."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI entry."""
        safe = scope["type"] != "http" or scope["method"] in {"GET", "HEAD", "OPTIONS"}
        if safe or scope["path"] in UPLOADS:
            await self._app(scope, receive, send)
            return
        try:
            body = await read_body(receive, BODY_LIMIT_BYTES)
        except ClientDisconnect:
            return
        except TooLarge as error:
            await error_response(error, {"Connection": "close"})(scope, receive, send)
            return
        await self._app(scope, _replay(body, receive), send)


async def read_body(receive: Receive, limit_bytes: int) -> bytes:
    """The whole body of a request; raises TooLarge, and ClientDisconnect when it breaks off."""
    body = bytearray()
    taken_bytes = 0
    more = True
    # A body that is too large is still taken in and thrown away, up to a point: a client
    # whose writing is cut off sees a broken connection in place of the answer.
    while more and taken_bytes < limit_bytes + DRAIN_LIMIT_BYTES:
        message = await receive()
        if message["type"] != "http.request":
            raise ClientDisconnect
        piece = message.get("body", b"")
        taken_bytes += len(piece)
        if taken_bytes <= limit_bytes:
            body += piece
        else:
            body.clear()
        more = message.get("more_body", False)
    if taken_bytes > limit_bytes:
        size = f"{limit_bytes // 1024} KiB" if limit_bytes < 2**21 else f"{limit_bytes >> 20} MiB"
        remedy = "a study is far smaller" if limit_bytes == BODY_LIMIT_BYTES else "thin the file"
        raise TooLarge(f"the body is larger than {size}: {remedy}")
    return bytes(body)


def _replay(body: bytes, receive: Receive) -> Receive:
    sent = False

    async def replayed() -> Message:
        nonlocal sent
        if sent:
            return await receive()
        sent = True
        return {"type": "http.request", "body": body, "more_body": False}

    return replayed
