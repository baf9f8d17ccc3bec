"""Posting batches in parts: each rank or device sends its own points under the number of the batch."""

from __future__ import annotations

import asyncio
from typing import Annotated

from fastapi import APIRouter, Path, Request, Response

from service.access import ServiceOf
from service.answers import PartResource, Receipt
from service.bodies import npy_body, refusals
from service.part_status import part_resource
from service.routes_batches import REFUSALS, Digest, Each, Prefer, Sequence, Start, Step, given_times, store_and_answer
from streaming.declaration import MAX_PARTS

router = APIRouter(prefix="/v1/runs/{run_id}/parts/{part}", tags=["batches"])

_BODY = npy_body(
    "NPY file, floats in C order, of the points of this part: (n_snapshots, n_fields, stop - start) or (n_snapshots, "
    "n_fields * (stop - start))"
)
PartNumber = Annotated[int, Path(ge=0, lt=MAX_PARTS, description="number of the part, from 0 as declared")]


@router.put("/batches/{sequence}", status_code=201, openapi_extra=_BODY, responses=REFUSALS)
async def put_part(
    run_id: str,
    part: PartNumber,
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
    """Store what one part has of a batch; the receipt is sent once it is durable. A repeat is harmless.

    A batch is complete, and is applied in its turn, when all parts of it are stored, in whatever order they came. All
    parts of a batch hold the same number of snapshots with the same times.
    """
    given = given_times(start_time, time_step, time)
    return await store_and_answer(request, response, service, run_id, part, sequence, None, given, prefer)


@router.get("", responses=refusals(404, 409, 422))
async def read_part(run_id: str, part: PartNumber, service: ServiceOf) -> PartResource:
    """One part: how far it has come, and where its rank goes on after a restart."""
    run = await asyncio.to_thread(service.reader.run, run_id)
    return await asyncio.to_thread(part_resource, service, run, part)
