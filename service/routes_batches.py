"""Posting batches: under a number of the caller's, or under the next one."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Header, Path, Query, Request, Response

from service.access import ServiceOf
from service.answers import Receipt, receipt
from service.bodies import npy_body, refusals
from service.core import Service
from service.intake import store_batch
from service.records import BatchRecord
from service.times import TimesGiven, parse_number
from service.waits import preferred_wait_seconds, wait_until

router = APIRouter(prefix="/v1/runs/{run_id}/batches", tags=["batches"])

# Above this the number of a batch no longer fits its file name, and no run posts so often.
MAX_SEQUENCE = 10**15 - 1

_BODY = npy_body(
    "NPY file, floats in C order: (n_snapshots, n_fields, n_points), (n_snapshots, n_fields * n_points) or, on a "
    "grid, (n_snapshots, n_fields, *shape)"
)
REFUSALS = {
    **refusals(400, 404, 408, 409, 411, 413, 415, 422, 429, 503, 507),
    200: {"model": Receipt, "description": "a repeat: it was stored before"},
}
Sequence = Annotated[int, Path(ge=0, le=MAX_SEQUENCE, description="number of the batch, from 0, without gaps")]
Start = Annotated[str | None, Query(description="time of the first snapshot")]
Step = Annotated[str | None, Query(description="time between snapshots")]
Each = Annotated[list[str] | None, Query(alias="time", description="time of each snapshot, repeated")]
Prefer = Annotated[str | None, Header(description="wait=N waits up to N seconds until the batch is applied")]
Digest = Annotated[str | None, Header(alias="Content-Digest", description="sha-256=:<base64>: of the body")]
Key = Annotated[
    str | None,
    Header(alias="Idempotency-Key", min_length=1, max_length=200, description="makes a repeat recognisable"),
]


@router.put("/{sequence}", status_code=201, openapi_extra=_BODY, responses=REFUSALS)
async def put_batch(
    run_id: str,
    sequence: Sequence,
    request: Request,
    response: Response,
    service: ServiceOf,
    start_time: Start = None,
    time_step: Step = None,
    time: Each = None,
    prefer: Prefer = None,
    content_digest: Digest = None,
) -> Receipt:
    """Store one batch; the receipt is sent once it is durable. A repeat of the same bytes is harmless.

    Batches are applied in the order of their numbers; one that comes ahead of a missing one is kept and waits.
    """
    given = given_times(start_time, time_step, time)
    return await store_and_answer(request, response, service, run_id, None, sequence, None, given, prefer)


@router.post("", status_code=201, openapi_extra=_BODY, responses=REFUSALS)
async def post_batch(
    run_id: str,
    request: Request,
    response: Response,
    service: ServiceOf,
    start_time: Start = None,
    time_step: Step = None,
    time: Each = None,
    prefer: Prefer = None,
    content_digest: Digest = None,
    idempotency_key: Key = None,
) -> Receipt:
    """Store one batch under the next number. Without an Idempotency-Key a repeat counts as new data."""
    given = given_times(start_time, time_step, time)
    return await store_and_answer(request, response, service, run_id, None, None, idempotency_key, given, prefer)


def given_times(start: str | None, step: str | None, each: list[str] | None) -> TimesGiven:
    """The times that a query gives. Raises the 422 problem of what is no number."""
    return TimesGiven(
        tuple(parse_number("time", text) for text in each or ()),
        None if start is None else parse_number("start_time", start),
        None if step is None else parse_number("time_step", step),
    )


async def store_and_answer(
    request: Request,
    response: Response,
    service: Service,
    run_id: str,
    part: int | None,
    sequence: int | None,
    key: str | None,
    given: TimesGiven,
    prefer: str | None,
) -> Receipt:
    """Store one batch, or one part of it, and give the receipt, after it is applied if the caller prefers to wait."""
    record, duplicate = await store_batch(request, service, run_id, part, sequence, key, given)
    _count(service, record, duplicate, int(request.headers["content-length"]))
    if duplicate and part is not None:
        service.repeats.note(run_id, part)

    def applied() -> bool:
        through = service.board.get(run_id).applied_through
        over = service.reader.run(run_id).status in ("failed", "closed")
        return over or (through is not None and through >= record.sequence)

    seconds = preferred_wait_seconds(prefer)
    if seconds and (record.first_snapshot is not None or part is not None):
        await wait_until(service, applied, seconds)
        record = service.reader.batch(run_id, record.sequence) or record  # the other parts may have come
    response.status_code = 200 if duplicate else 201
    return receipt(record, duplicate, service.board.get(run_id))


def _count(service: Service, record: BatchRecord, duplicate: bool, n_bytes: int) -> None:
    """For the metrics; the snapshots of a batch count with its last part."""
    service.counters["batches_repeated" if duplicate else "batches_stored"] += 1
    if not duplicate:
        service.counters["bytes_stored"] += n_bytes
        service.counters["snapshots_stored"] += record.n_snapshots if record.complete else 0
