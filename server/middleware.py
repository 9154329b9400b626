"""What applies to every request and response."""

from collections.abc import MutableMapping
from typing import Any

from starlette.datastructures import Headers, MutableHeaders
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from server.errors import TooLarge, error_response

BODY_LIMIT_BYTES = 1_048_576

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
        announced = Headers(scope=scope).get("content-length", "0")
        body = b"" if announced.isdigit() and int(announced) <= BODY_LIMIT_BYTES else None
        more = True
        while body is not None and more:
            message: MutableMapping[str, Any] = await receive()
            if message["type"] != "http.request":
                return
            body += message.get("body", b"")
            more = message.get("more_body", False)
            if len(body) > BODY_LIMIT_BYTES:
                body = None
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
