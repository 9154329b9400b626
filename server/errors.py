"""The server's exceptions, each with its HTTP status and a text that says what to do."""

from fastapi.responses import JSONResponse


class ServerError(Exception):
    """Base: becomes ``{"error": {"code", "message", "where"}}`` at the edge."""

    status = 500
    code = "internal"

    def __init__(self, message: str, where: str = "") -> None:
        super().__init__(message)
        self.message = message
        self.where = where


class NotFound(ServerError):
    """What was asked for does not exist, or not any more."""

    status = 404
    code = "not_found"


class Conflict(ServerError):
    """The request does not fit the present state."""

    status = 409
    code = "conflict"


class OverLimit(ServerError):
    """A study larger than this server was started for."""

    status = 422
    code = "over_limit"


class OutOfRange(ServerError):
    """A parameter outside its bounds."""

    status = 422
    code = "out_of_range"


class UnreadableFile(ServerError):
    """A file whose content cannot be taken; ``where`` is the choice that would have it taken."""

    status = 422
    code = "unreadable"


class BadRequest(ServerError):
    """A request that cannot be read."""

    status = 400
    code = "bad_request"


class NotSignedIn(ServerError):
    """No valid access key or cookie came with the request."""

    status = 401
    code = "not_signed_in"


class Forbidden(ServerError):
    """The key that was given may not do this, or another site sent the request."""

    status = 403
    code = "forbidden"


class TooManyAttempts(ServerError):
    """Access keys are being guessed."""

    status = 429
    code = "too_many_attempts"


class TooLarge(ServerError):
    """A request body beyond the limit."""

    status = 413
    code = "too_large"


class DiskFull(ServerError):
    """The disk of the data folder has no room."""

    status = 507
    code = "disk_full"


class SettingsError(Exception):
    """The server cannot start as told; one line that says what to change."""


def error_response(error: ServerError, headers: dict[str, str] | None = None) -> JSONResponse:
    """The one JSON shape of every error."""
    body = {"error": {"code": error.code, "message": error.message, "where": error.where}}
    return JSONResponse(body, status_code=error.status, headers=headers)
