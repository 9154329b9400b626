"""What applies to every request and response."""

from starlette.datastructures import MutableHeaders
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from server.errors import TooLarge, error_response

BODY_LIMIT_BYTES = 1_048_576
DRAIN_LIMIT_BYTES = 33_554_432

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
        if scope["type"] != "http" or scope["method"] in {"GET", "HEAD", "OPTIONS"}:
            await self._app(scope, receive, send)
            return
        body: bytes | None = b""
        taken_bytes = 0
        more = True
        # A body that is too large is still taken in and thrown away, up to a point: a client
        # whose writing is cut off sees a broken connection in place of the answer.
        while more and taken_bytes < DRAIN_LIMIT_BYTES:
            message = await receive()
            if message["type"] != "http.request":
                return
            piece = message.get("body", b"")
            taken_bytes += len(piece)
            body = body + piece if body is not None and taken_bytes <= BODY_LIMIT_BYTES else None
            more = message.get("more_body", False)
        if body is None:
            error = TooLarge(
                f"the body is larger than {BODY_LIMIT_BYTES // 1024} KiB: a study is far smaller"
            )
            await error_response(error, {"Connection": "close"})(scope, receive, send)
            return
        await self._app(scope, _replay(body, receive), send)


def _replay(body: bytes, receive: Receive) -> Receive:
    sent = False

    async def replayed() -> Message:
        nonlocal sent
        if sent:
            return await receive()
        sent = True
        return {"type": "http.request", "body": body, "more_body": False}

    return replayed
