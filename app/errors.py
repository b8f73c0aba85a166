"""Everything that can go wrong, as one tree.

SoftmodeError
├── SheetError          a link, form or body asks something that cannot be asked (422)
├── PriceError          the question is fine but costs more than this server allows (422)
├── RequestError        the request itself is malformed: body, headers, address (400, 408, 413, 414, 415)
├── RefusedError        not allowed: key missing or guessed, foreign site or host (401, 403, 421, 429)
├── NotFoundError       no such page, job or stored link (404)
├── ConflictError       the job is in a state in which this cannot be done (409)
├── BusyError           the queue is full or the server is restarting (503, Retry-After)
├── ClusterError        the cluster that computes is lost, or would give other numbers (503, Retry-After)
├── JobFailedError      the computation ended without a result (500)
├── StoreError          the data directory cannot be used (507)
└── StartError          the server cannot start with these settings

Each error carries what a reader needs to put it right: the field, the value that was given and the
values that are allowed.
"""

from typing import Any


class SoftmodeError(Exception):
    """Base of all errors of the service.

    Attributes
    ----------
    code : str
        Short name that scripts can compare.
    message : str
        One or two sentences that say what is wrong and what to change.
    field, value, allowed : object
        The key at fault, what was given, and the range or list of what is allowed; None where that
        makes no sense.
    status : int
        HTTP status.
    retry_after : int or None
        Seconds after which asking again makes sense.
    """

    status = 500

    def __init__(
        self,
        code: str,
        message: str,
        field: str | None = None,
        value: Any = None,
        allowed: Any = None,
        *,
        status: int | None = None,
        retry_after: int | None = None,
    ) -> None:
        super().__init__(message)
        self.code = code
        self.message = message
        self.field = field
        self.value = value
        self.allowed = allowed
        self.retry_after = retry_after
        if status is not None:
            self.status = status

    def body(self) -> dict[str, Any]:
        """Return the one error shape of all routes, ready for JSON."""
        return {
            "error": {
                "code": self.code,
                "message": _encodable(self.message),
                "field": None if self.field is None else _plain(self.field),
                "value": _plain(self.value),
                "allowed": _plain(self.allowed),
            }
        }


class SheetError(SoftmodeError):
    """A link, a form or a body asks something that cannot be asked."""

    status = 422


class PriceError(SoftmodeError):
    """The question costs more time or memory than this server allows."""

    status = 422


class RequestError(SoftmodeError):
    """The request is malformed before its meaning is looked at."""

    status = 400


class RefusedError(SoftmodeError):
    """The request is understood and not allowed."""

    status = 403


class NotFoundError(SoftmodeError):
    """There is nothing at this address."""

    status = 404


class ConflictError(SoftmodeError):
    """The job is in a state in which this cannot be done."""

    status = 409


class BusyError(SoftmodeError):
    """The server cannot take this on now."""

    status = 503


class ClusterError(SoftmodeError):
    """The cluster that computes is lost, or its workers would give other numbers."""

    status = 503


class JobFailedError(SoftmodeError):
    """The computation ended without a result."""

    status = 500


class StoreError(SoftmodeError):
    """The data directory cannot be used, or something does not fit into it."""

    status = 507


class StartError(SoftmodeError):
    """The server cannot start with these settings."""


LONGEST_QUOTE = 200


def _encodable(text: str) -> str:
    """Return a text without the lone surrogates that a JSON body can smuggle in."""
    return text.encode("utf-8", "replace").decode("utf-8")


def _plain(value: Any) -> Any:
    """Return `value` as JSON-able data that is safe to echo: short, and without NaN or infinities."""
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, int):
        return (
            value
            if abs(value) < 2**53
            else _plain(f"{value:.6e}" if abs(value) < 10**300 else "a huge number")
        )
    if isinstance(value, float):
        return value if abs(value) < float("inf") else str(value)
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value[:50]]
    text = _encodable(value if isinstance(value, str) else str(value))
    return text if len(text) <= LONGEST_QUOTE else text[:LONGEST_QUOTE] + "…"
