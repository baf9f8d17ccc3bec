"""The one place where errors become answers: our problems, and the framework's refusals.

What nobody expected is answered by `service.middleware`, outside of the framework.
"""

from __future__ import annotations

import math
from typing import Any

from fastapi import FastAPI
from fastapi.exceptions import RequestValidationError
from pydantic import ValidationError
from starlette.exceptions import HTTPException
from starlette.requests import Request
from starlette.responses import JSONResponse, Response

from service.problems import PROBLEM_JSON, Problem

_KIND_OF_STATUS = {404: "not-found", 405: "method-not-allowed", 415: "wrong-media-type"}
MAX_ERRORS = 20  # a hostile body can be wrong in a million places
MAX_SHOWN_CHARACTERS = 200


def answer(problem: Problem) -> Response:
    """A problem document."""
    return JSONResponse(problem.document(), problem.status, problem.headers, PROBLEM_JSON)


def from_validation(errors: list[Any]) -> Problem:
    """The places where a request differs from what is declared, with their values."""
    shown = [_one_error(error) for error in errors[:MAX_ERRORS]]
    first = shown[0]
    more = f" (and {len(errors) - 1} more)" if len(errors) > 1 else ""
    return Problem("invalid-request", f"{first['at']}: {first['message']}{more}", errors=shown)


def _one_error(error: dict[str, Any]) -> dict[str, Any]:
    at = ".".join(_sendable(str(part)[:MAX_SHOWN_CHARACTERS]) for part in error.get("loc", ())) or "body"
    message = _sendable(str(error.get("msg", ""))[: 5 * MAX_SHOWN_CHARACTERS])
    return {"at": at, "message": message, "got": _shown(error.get("input"))}


def _shown(value: Any) -> Any:
    if value is None or isinstance(value, bool | int):
        return value if not isinstance(value, int) or abs(value) < 2**53 else str(value)[:MAX_SHOWN_CHARACTERS]
    if isinstance(value, float):
        return value if math.isfinite(value) else str(value)
    text = value if isinstance(value, str) else type(value).__name__
    return _sendable(text[:MAX_SHOWN_CHARACTERS])


def _sendable(text: str) -> str:
    """The text with what UTF-8 cannot hold replaced: JSON can name half a surrogate pair, and no answer can."""
    return text.encode("utf-8", "replace").decode()


def install(app: FastAPI) -> None:
    """Register the translations."""

    async def problem(request: Request, error: Exception) -> Response:
        assert isinstance(error, Problem)
        request.app.state.service.counters[f"refused {error.kind}"] += 1
        return answer(error)

    async def invalid(_: Request, error: Exception) -> Response:
        assert isinstance(error, RequestValidationError | ValidationError)
        return answer(from_validation(list(error.errors())))

    async def refused(_: Request, error: Exception) -> Response:
        assert isinstance(error, HTTPException)
        kind = _KIND_OF_STATUS.get(error.status_code, "bad-request")
        return answer(Problem(kind, str(error.detail), headers=error.headers))

    app.add_exception_handler(Problem, problem)
    app.add_exception_handler(RequestValidationError, invalid)
    app.add_exception_handler(HTTPException, refused)
