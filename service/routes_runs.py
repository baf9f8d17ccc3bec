"""Declaring, listing, changing and removing runs; weights, positions and close."""

from __future__ import annotations

import asyncio
import hashlib
import re
import secrets
from typing import Annotated

import numpy as np
from fastapi import APIRouter, Header, Query, Request, Response
from pydantic import ValidationError

from service.access import ServiceOf
from service.answers import RunChange, RunList, RunResource, run_resource
from service.bodies import npy_body, refusals
from service.commit import check_open
from service.core import Service
from service.durable import storage_problem
from service.intake import Body, check_capacity, check_headers, received
from service.part_status import parts_status
from service.problems import Problem
from service.records import RunRecord, one
from service.registry import add_event, find_run
from service.shapes import Expected, expect_positions, expect_triangles, expect_weights, parse_triangles
from service.translation import from_validation
from service.waits import preferred_wait_seconds, wait_until
from streaming.basis import memory_needed_bytes
from streaming.declaration import RunDeclaration
from streaming.errors import DeclarationError
from streaming.intake import parse_positions, parse_weights

router = APIRouter(prefix="/v1/runs", tags=["runs"])

PAGE_RUNS = 100
CLOSE_WAIT_SECONDS = 10.0  # most closes end sooner, and the caller then has the final verdict at once


@router.post("", status_code=201, responses=refusals(400, 409, 413, 422, 429, 503, 507))
def declare_run(
    declaration: RunDeclaration,
    response: Response,
    service: ServiceOf,
    idempotency_key: Annotated[
        str | None,
        Header(min_length=1, max_length=200, description="the same key with the same declaration is the same run"),
    ] = None,
) -> RunResource:
    """Declare a run. The answer is the whole run, and Location its address."""
    service.poison.check()
    _check_memory(declaration, service.settings.memory_bytes)
    _check_names(declaration)
    run_id = _new_id(declaration.name, idempotency_key)
    response.headers["Location"] = f"/v1/runs/{run_id}"
    # The folder comes second: after a crash in between, the next start makes it, and after an error the first body.
    run = service.registry.add_run(run_id, declaration.model_dump_json(), service.settings.max_runs)
    try:
        service.folders.run(run_id).create(service.poison)
    except OSError as error:
        left = f"run {run_id} is declared all the same: declare it again with its Idempotency-Key, or delete it"
        raise storage_problem(error, left) from error
    return resource(service, run)


@router.get("", responses=refusals(422))
def list_runs(
    service: ServiceOf,
    after: Annotated[str | None, Query(max_length=80, description="id of the last run of the page before")] = None,
) -> RunList:
    """Runs, newest first, a hundred at a time."""
    runs = service.reader.runs(before=after, limit=PAGE_RUNS)
    following = f"/v1/runs?after={runs[-1].id}" if len(runs) == PAGE_RUNS else None
    return RunList.model_construct(runs=[resource(service, run) for run in runs], next=following)


@router.get("/{run_id}", responses=refusals(404))
def read_run(run_id: str, service: ServiceOf) -> RunResource:
    """One run: as declared, and how far it has come."""
    return resource(service, service.reader.run(run_id))


@router.patch("/{run_id}", responses=refusals(404, 409, 422))
def change_run(run_id: str, change: RunChange, service: ServiceOf) -> RunResource:
    """Change labels at any time, and the criterion before the first batch."""
    with service.registry.transaction() as db:
        run = find_run(db, run_id)
        stored = one(db.execute("SELECT count(*) FROM batches WHERE run = ?", (run_id,)))
        if change.criterion is not None and stored:
            raise Problem(
                "already-started",
                f"run {run_id} holds {stored} batches; the criterion can change only before the first, since a "
                "verdict that is bent to the data means nothing; declare a new run",
            )
        changed = _changed(run.declaration, change)
        db.execute("UPDATE runs SET declaration = ? WHERE id = ?", (changed.model_dump_json(), run_id))
        add_event(db, run_id, "changed", {})
    return resource(service, service.reader.run(run_id))


def _changed(declaration: RunDeclaration, change: RunChange) -> RunDeclaration:
    try:
        changed = RunDeclaration.model_validate({**declaration.model_dump(), **change.model_dump(exclude_none=True)})
    except ValidationError as error:
        raise from_validation(error.errors()) from error
    _check_names(changed)
    return changed


@router.delete("/{run_id}", status_code=204, responses=refusals(404, 503))
def delete_run(run_id: str, service: ServiceOf) -> None:
    """Remove a run and all its data, for good."""
    service.reader.run(run_id)
    service.registry.remove_run(run_id)
    service.worker.forget(run_id)
    service.bell.ring()


@router.post(
    "/{run_id}/close",
    responses={**refusals(404, 409, 503), 202: {"model": RunResource, "description": "still being applied"}},
)
async def close_run(
    run_id: str,
    response: Response,
    service: ServiceOf,
    leave_out_waiting: Annotated[
        bool, Query(description="close although a batch is missing; what waits for it is left out")
    ] = False,
    prefer: Annotated[str | None, Header()] = None,
) -> RunResource:
    """No more data will come: apply what waits, give the final verdict, keep the final checkpoint."""
    await asyncio.to_thread(_begin_close, service, run_id, leave_out_waiting)
    seconds = preferred_wait_seconds(prefer) or CLOSE_WAIT_SECONDS
    await wait_until(service, lambda: service.reader.run(run_id).status != "closing", seconds)
    run = service.reader.run(run_id)
    response.status_code = 202 if run.status == "closing" else 200
    return resource(service, run)


def _begin_close(service: Service, run_id: str, leave_out_waiting: bool) -> None:
    with service.registry.transaction() as db:
        run = find_run(db, run_id)
        if run.status in ("closing", "closed"):
            return
        check_open(run)
        waiting = one(db.execute("SELECT count(*) FROM batches WHERE run = ? AND first_snapshot IS NULL", (run_id,)))
        if waiting and not leave_out_waiting:
            raise Problem(
                "gap-open",
                f"{waiting} stored batches wait for batch {run.next_sequence}, which is missing"
                f"{' or incomplete' if run.declaration.parts else ''}; send it, or close with leave_out_waiting=true",
                missing_sequence=run.next_sequence,
                n_waiting=waiting,
            )
        db.execute("UPDATE runs SET status = 'closing' WHERE id = ?", (run_id,))
        add_event(db, run_id, "closing", {"left_out_batches": waiting} if waiting else {})
    service.worker.wake(run_id)


@router.put(
    "/{run_id}/weights",
    status_code=204,
    openapi_extra=npy_body("quadrature weights: (n_points) or (n_fields, n_points), positive"),
    responses=refusals(400, 404, 409, 411, 413, 415, 422, 503, 507),
)
async def put_weights(run_id: str, request: Request, service: ServiceOf) -> None:
    """Cell volumes, areas or tributary areas, before the first batch."""
    run = await asyncio.to_thread(service.reader.run, run_id)
    await _put_array("weights", run, expect_weights(run.declaration), request, service)


@router.put(
    "/{run_id}/positions",
    status_code=204,
    openapi_extra=npy_body("positions of scattered points: (n_points, 1 to 3), a length"),
    responses=refusals(400, 404, 409, 411, 413, 415, 422, 503, 507),
)
async def put_positions(run_id: str, request: Request, service: ServiceOf) -> None:
    """Where scattered points are, before the first batch."""
    run = await asyncio.to_thread(service.reader.run, run_id)
    await _put_array("positions", run, expect_positions(run.declaration), request, service)


@router.put(
    "/{run_id}/triangles",
    status_code=204,
    openapi_extra=npy_body("triangles over scattered points: (n_triangles, 3), numbers of points from 0, whole"),
    responses=refusals(400, 404, 409, 411, 413, 415, 422, 503, 507),
)
async def put_triangles(run_id: str, request: Request, service: ServiceOf) -> None:
    """How scattered points are joined to a surface, before the first batch; exports carry it on."""
    run = await asyncio.to_thread(service.reader.run, run_id)
    await _put_array("triangles", run, expect_triangles(run.declaration), request, service)


async def _put_array(name: str, run: RunRecord, expected: Expected, request: Request, service: Service) -> None:
    n_bytes = check_headers(request, service.settings.max_body_bytes)
    _check_unstarted(run, name, service.reader.backlog(run.id).n_batches)
    check_capacity(service, run, None, n_bytes)
    async with received(request, service, run, expected, n_bytes) as body:
        loop = asyncio.get_running_loop()
        await loop.run_in_executor(service.bodies, _check_array, name, body, run.declaration)
        await loop.run_in_executor(service.bodies, body.draft.sync)
        await asyncio.shield(loop.run_in_executor(service.commits, _keep_array, name, service, run.id, body))


def _check_array(name: str, body: Body, declaration: RunDeclaration) -> None:
    values = np.fromfile(body.draft.path, body.header.dtype, offset=body.header.header_bytes)
    values = values.reshape(body.header.shape)
    try:
        if name == "weights":
            parse_weights(declaration, values)
        elif name == "triangles":
            parse_triangles(declaration, values)
        else:
            parse_positions(declaration, values)
    except DeclarationError as error:
        raise Problem("wrong-values", str(error)) from error


def _keep_array(name: str, service: Service, run_id: str, body: Body) -> None:
    """On the commit thread, so that no first batch slips in between."""
    run = service.reader.run(run_id)
    _check_unstarted(run, name, service.reader.backlog(run_id).n_batches)
    body.draft.keep(service.folders.run(run_id).array(name))


def _check_unstarted(run: RunRecord, name: str, n_batches: int) -> None:
    check_open(run)
    if run.next_sequence or n_batches:
        raise Problem(
            "already-started",
            f"run {run.id} holds batches; {name} come before the first one. Declare a new run",
        )


def resource(service: Service, run: RunRecord) -> RunResource:
    """The run as it stands."""
    last = service.reader.batch(run.id, run.next_sequence - 1) if run.next_sequence else None
    return run_resource(
        run,
        service.board.get(run.id),
        service.reader.backlog(run.id),
        None if last is None else last.last_time,
        parts_status(service, run),
    )


def _check_memory(declaration: RunDeclaration, limit_bytes: int) -> None:
    needed = memory_needed_bytes(declaration)
    if needed > limit_bytes:
        raise Problem(
            "run-too-large",
            f"{declaration.n_rows} rows at rank {declaration.rank} in blocks of {declaration.length_of_block} need "
            f"{needed} bytes of memory, {limit_bytes} are allowed for a run; lower "
            "retained_rank or block_length, use float32, or raise the setting memory_bytes",
            needed_bytes=needed,
            limit=limit_bytes,
        )


def _check_names(declaration: RunDeclaration) -> None:
    """Field names become names of arrays in checkpoints, and labels must be numbers that JSON can hold."""
    for field in declaration.fields:
        if "/" in field.name or field.name.strip(". ") == "":
            raise Problem("invalid-request", f"field name {field.name!r} must hold no / and more than dots")
    for name, value in declaration.labels.items():
        if isinstance(value, float) and not np.isfinite(value):
            raise Problem("invalid-request", f"label {name!r} is {value}; it must be finite")


def _new_id(name: str, key: str | None) -> str:
    """Readable, safe in a path, and never the same twice, unless the same idempotency key asks for it."""
    slug = re.sub(r"[^a-z0-9]+", "-", name.lower()).strip("-")[:40] or "run"
    tail = secrets.token_hex(4) if key is None else hashlib.sha256(key.encode()).hexdigest()[:16]
    return f"{slug}-{tail}"
