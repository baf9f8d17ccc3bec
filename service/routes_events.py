"""What happens, as server-sent events; the numbers are durable, so a stream resumes without gap or repeat."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from typing import Annotated

from fastapi import APIRouter, Header, Query
from starlette.responses import Response, StreamingResponse

from service.access import ServiceOf
from service.bodies import refusals
from service.core import Service
from service.problems import Problem
from service.records import Event

router = APIRouter(prefix="/v1", tags=["events"])

PAGE_EVENTS = 100  # read at a time; a slow reader is held by its own connection and costs no more memory than this
HEARTBEAT_SECONDS = 15.0  # below the idle timeout of common proxies (common practice)
RETRY_MILLISECONDS = 2000

_STREAM: dict[int | str, dict[str, object]] = {
    200: {"description": "server-sent events", "content": {"text/event-stream": {"schema": {"type": "string"}}}}
}
LastId = Annotated[str | None, Header(alias="Last-Event-ID", description="number of the last event seen")]
After = Annotated[int | None, Query(ge=0, description="like Last-Event-ID, for the first connection")]


@router.get("/events", response_class=Response, responses={**_STREAM, **refusals(422, 503)})
async def all_events(service: ServiceOf, last_event_id: LastId = None, after: After = None) -> Response:
    """Events of all runs, from now on, or from Last-Event-ID or ``after``."""
    return _stream(service, None, _start(service, last_event_id, after))


@router.get("/runs/{run_id}/events", response_class=Response, responses={**_STREAM, **refusals(404, 422, 503)})
async def run_events(run_id: str, service: ServiceOf, last_event_id: LastId = None, after: After = None) -> Response:
    """Events of one run, from now on, or from Last-Event-ID or ``after``."""
    service.reader.run(run_id)
    return _stream(service, run_id, _start(service, last_event_id, after))


def _start(service: Service, last_event_id: str | None, after: int | None) -> int:
    if last_event_id is not None:
        if not last_event_id.isdecimal() or len(last_event_id) > 18:
            raise Problem("invalid-request", f"Last-Event-ID {last_event_id[:40]!r} is no event number")
        return int(last_event_id)
    return service.reader.last_event() if after is None else after


def _stream(service: Service, run_id: str | None, after: int) -> Response:
    if service.n_streams >= service.settings.max_event_streams:
        raise Problem(
            "stopping",
            f"{service.n_streams} event streams are open, which is the limit; poll instead",
            retry_after_seconds=30,
        )
    headers = {"Cache-Control": "no-store", "X-Accel-Buffering": "no"}
    return StreamingResponse(_events(service, run_id, after), media_type="text/event-stream", headers=headers)


async def _events(service: Service, run_id: str | None, after: int) -> AsyncIterator[str]:
    service.n_streams += 1
    try:
        yield f"retry: {RETRY_MILLISECONDS}\n\n"
        while not service.bell.stopping.is_set():
            rung = service.bell.watch()
            events = await asyncio.to_thread(service.reader.events, after, run_id, PAGE_EVENTS)
            for event in events:
                after = event.id
                yield _text(event)
            if not events and not await service.bell.wait(rung, HEARTBEAT_SECONDS):
                yield ": still here\n\n"
    finally:
        service.n_streams -= 1


def _text(event: Event) -> str:
    data = {"run": event.run, "at": event.at, **event.data}
    return f"id: {event.id}\nevent: {event.kind}\ndata: {json.dumps(data)}\n\n"
