"""The error tree of the client, and the one place where foreign errors become ours.

Two branches, those the service refused and those it never answered::

    SlackwaterError
    ├── UnreachableError     no answer: refused, timed out, cut off in the middle
    ├── RefusedError         the service answered with a problem document (RFC 9457)
    │   ├── InvalidError     400, 411, 413, 415, 422: what was sent is wrong; sending it again will not help
    │   ├── DamagedError     408, or 400 of a body that came torn or changed: send it again
    │   ├── AccessError      401, 403: the token is missing or wrong
    │   ├── NotFoundError    404, 410: no such run, or nothing to read yet
    │   ├── ConflictError    409, 412: another batch has this number, or the run is closed
    │   └── BusyError        429, 503, 507: try again after `retry_after_seconds`
    └── UnsentError          a hook that was asked to raise could not send its snapshots

    UnsentWarning            the same, from a hook that was not asked to raise
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import httpx


class SlackwaterError(Exception):
    """Base of all errors raised on purpose by this package."""


class UnreachableError(SlackwaterError):
    """The service gave no answer; whether it took what was sent is unknown. Repeating is harmless."""


class RefusedError(SlackwaterError):
    """The service said no.

    Attributes
    ----------
    status : HTTP status code
    problem_type : stable URI reference of the problem, for programs to compare
    title, detail : for people
    """

    def __init__(self, status: int, problem_type: str, title: str, detail: str) -> None:
        super().__init__(f"{title} ({status}): {detail}" if detail else f"{title} ({status})")
        self.status = status
        self.problem_type = problem_type
        self.title = title
        self.detail = detail


class InvalidError(RefusedError):
    """What was sent is wrong; the message says in what."""


class DamagedError(RefusedError):
    """The body did not arrive as it was sent; nothing of it was stored."""


class AccessError(RefusedError):
    """The token is missing or wrong."""


class NotFoundError(RefusedError):
    """No such run, or nothing to read yet."""


class ConflictError(RefusedError):
    """The state of the run does not allow it."""


class BusyError(RefusedError):
    """The service is busy, starting, stopping or full; it says when to try again."""

    retry_after_seconds: float = 0.0


class UnsentError(SlackwaterError):
    """Snapshots could not be sent and are lost to the run."""


class UnsentWarning(UserWarning):
    """Snapshots could not be sent and are lost to the run; the solver was left in peace."""


_CLASS_OF_STATUS: Mapping[int, type[RefusedError]] = {
    **dict.fromkeys((400, 411, 413, 415, 422), InvalidError),
    **dict.fromkeys((401, 403), AccessError),
    408: DamagedError,
    **dict.fromkeys((404, 410), NotFoundError),
    **dict.fromkeys((409, 412), ConflictError),
    **dict.fromkeys((429, 502, 503, 504, 507), BusyError),
}

# a 400 that is the fault of the way, not of the sender
_DAMAGED_TYPES = frozenset({"/problems/digest-mismatch", "/problems/torn-body"})

MAX_RETRY_AFTER_SECONDS = 3600.0  # a service that asks for more is taken to mean "not today"


def unreachable(url: str, error: httpx.TransportError) -> UnreachableError:
    """Say that nothing answered at ``url``, and why."""
    why = str(error) or type(error).__name__
    return UnreachableError(f"no answer from {url}: {why}; is the service running there?")


def refusal(response: httpx.Response) -> RefusedError:
    """Translate an error response, whose body has been read, into the matching error."""
    problem = _problem(response)
    problem_type = str(problem.get("type", "about:blank"))
    cls = _CLASS_OF_STATUS.get(response.status_code, RefusedError)
    error = (DamagedError if problem_type in _DAMAGED_TYPES else cls)(
        response.status_code,
        problem_type,
        str(problem.get("title", response.reason_phrase or "refused")),
        str(problem.get("detail", "")),
    )
    if isinstance(error, BusyError):
        error.retry_after_seconds = parse_retry_after(response.headers.get("retry-after"))
    return error


def parse_retry_after(value: str | None) -> float:
    """Seconds to wait by a Retry-After header; 0 when absent, a date, or nonsense."""
    try:
        seconds = float(value or 0.0)
    except ValueError:
        return 0.0
    return min(max(seconds, 0.0), MAX_RETRY_AFTER_SECONDS) if math.isfinite(seconds) else 0.0


def _problem(response: httpx.Response) -> dict[str, Any]:
    """The problem document; a stand-in when a proxy or a crash answered with something else."""
    try:
        problem = response.json()
    except ValueError:
        return {}
    return problem if isinstance(problem, dict) else {}
