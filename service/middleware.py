"""Guards in front of every request, as plain ASGI: they see disconnects and streams as they are."""

from __future__ import annotations

import hmac
import json
import logging
from typing import Any

from starlette.datastructures import Headers
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.problems import PROBLEM_JSON, Problem
from service.session import Session
from service.settings import Settings, is_loopback

logger = logging.getLogger("slackwater")

# Probes carry no data, and must answer whoever watches the service; so do the files of the page, which asks for the
# token itself.
OPEN_PATHS = frozenset({"/livez", "/readyz", "/"})
OPEN_FOLDER = "/page/"
# Bodies that are streamed and bounded by their handler.
_ARRAY_ENDINGS = ("/batches", "/weights", "/positions", "/triangles")


class Guard:
    """Checks host and token, and bounds JSON bodies, before anything else looks at a request."""

    def __init__(self, app: ASGIApp, settings: Settings) -> None:
        self._app = app
        self._token = None if settings.token is None else settings.token.get_secret_value().encode()
        self._session = None if self._token is None else Session(self._token)
        self._loopback_only = is_loopback(settings.host)
        self._max_json_bytes = settings.max_json_bytes

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        headers = Headers(scope=scope)
        try:
            self._check_host(headers)
            if scope["path"] not in OPEN_PATHS and not scope["path"].startswith(OPEN_FOLDER):
                self._check_token(scope["method"], headers)
            if not _is_array(scope["path"]):
                self._check_length(headers)
                receive = self._bounded(receive)
        except Problem as problem:
            await send_problem(problem, send)
            return
        await self._answered(scope, receive, send)

    async def _answered(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Run the application; an error that nobody expected is logged here, and never shown."""
        started = False

        async def noted(message: Message) -> None:
            nonlocal started
            started = True
            await send(message)

        try:
            await self._app(scope, receive, noted)
        except Problem as problem:  # raised while a body was counted
            if not started:
                await send_problem(problem, send)
        except Exception:
            logger.exception("%s %s failed", scope["method"], scope["path"])
            if started:
                raise  # the connection is cut, so that the client does not take a part for the whole
            await send_problem(Problem("internal", "the service failed on this request; its log says why"), send)

    def _check_host(self, headers: Headers) -> None:
        """On loopback only loopback names are served, so that no web page can reach in under a name of its own."""
        host = headers.get("host", "").rsplit(":", 1)[0] if not headers.get("host", "").endswith("]") else "[::1]"
        if self._loopback_only and host and not is_loopback(host):
            raise Problem("host-refused", f"this service answers on loopback names only, not as {host[:80]!r}")

    def _check_token(self, method: str, headers: Headers) -> None:
        if self._token is None or self._session is None or self._session.opens(method, headers.get("cookie", "")):
            return
        scheme, _, given = headers.get("authorization", "").partition(" ")
        if scheme.lower() != "bearer" or not hmac.compare_digest(given.strip().encode(), self._token):
            raise Problem(
                "token-needed",
                "this service asks for a token: send Authorization: Bearer <token>",
                headers={"WWW-Authenticate": "Bearer"},
            )

    def _check_length(self, headers: Headers) -> None:
        length = headers.get("content-length", "0")
        if length.isdecimal() and int(length) > self._max_json_bytes:
            raise _too_large(self._max_json_bytes)

    def _bounded(self, receive: Receive) -> Receive:
        """Count what comes without a length."""
        received = 0

        async def counted() -> Message:
            nonlocal received
            message = await receive()
            received += len(message.get("body", b""))
            if received > self._max_json_bytes:
                raise _too_large(self._max_json_bytes)
            return message

        return counted


def _is_array(path: str) -> bool:
    return path.startswith("/v1/runs/") and (path.endswith(_ARRAY_ENDINGS) or "/batches/" in path)


def _too_large(limit: int) -> Problem:
    return Problem("body-too-large", f"the body has more than {limit} bytes, which is the limit for JSON", limit=limit)


async def send_problem(problem: Problem, send: Send) -> None:
    """Answer with a problem document, outside of any framework."""
    body = json.dumps(problem.document()).encode()
    fields: dict[str, Any] = {
        "content-type": PROBLEM_JSON,
        "content-length": str(len(body)),
        "connection": "close",
        **{name.lower(): value for name, value in problem.headers.items()},
    }
    pairs = [(name.encode(), value.encode()) for name, value in fields.items()]
    await send({"type": "http.response.start", "status": problem.status, "headers": pairs})
    await send({"type": "http.response.body", "body": body})
