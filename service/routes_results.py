"""The verdict, its history, and the arrays of the newest checkpoint."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Literal

import numpy as np
from fastapi import APIRouter, Header, Path, Query, Response
from starlette.responses import StreamingResponse

from service.access import ServiceOf
from service.answers import CheckpointList, CheckpointResource, first_report
from service.archive import zipped
from service.arrays import SNAPSHOTS_HEADER, array_response, check_json_size, json_text, streamed_response, wants
from service.bodies import NPY, array_answer, refusals
from service.drawing import mean_picture, mode_picture
from service.problems import Problem
from service.results import chosen, newest, take, take_newest
from service.waits import MAX_WAIT_SECONDS, wait_until
from streaming.report import Convergence, State

router = APIRouter(prefix="/v1/runs/{run_id}", tags=["results"])

Accept = Annotated[str | None, Header(description="application/x-npy, or application/json for small arrays")]
Number = Annotated[int, Path(ge=1, description="number of the mode, from 1")]
Count = Annotated[int | None, Query(ge=1, description="how many modes; all that are kept by default")]
FieldName = Annotated[str | None, Query(max_length=120, description="which field; the first by default")]
Checkpoint = Annotated[
    int | None, Query(ge=0, le=10**12, description="read from the checkpoint at so many snapshots; newest by default")
]
Last = Annotated[int | None, Query(ge=1, description="only so many of the newest snapshots")]


@router.get(
    "/convergence",
    response_model=Convergence,
    responses={**refusals(404, 422, 503), 304: {"description": "nothing new"}},
)
async def read_convergence(
    run_id: str,
    service: ServiceOf,
    wait_for: Annotated[Literal["settled", "change"] | None, Query(description="hold the answer until then")] = None,
    timeout: Annotated[float, Query(ge=0, le=MAX_WAIT_SECONDS, description="seconds to hold it at most")] = 30.0,
    if_none_match: Annotated[str | None, Header()] = None,
) -> Response:
    """The numbers and the verdict; a run that is over, or has settled, is never waited for."""
    run = service.reader.run(run_id)
    before = service.board.get(run_id).etag

    def reached() -> bool:
        value = service.board.get(run_id)
        if wait_for == "change" and value.etag not in (before, if_none_match):
            return True
        over = service.reader.run(run_id).status in ("closed", "failed")
        return over or (wait_for == "settled" and value.verdict is State.SETTLED)

    if wait_for is not None:
        await wait_until(service, reached, timeout)
    value = service.board.get(run_id)
    text = value.report or first_report(service.reader.run(run.id)).model_dump_json()
    if value.report is not None and if_none_match is not None and value.etag in if_none_match:
        return Response(status_code=304, headers={"ETag": value.etag})
    headers = {"Cache-Control": "no-cache"} | ({"ETag": value.etag} if value.report else {})
    return Response(text, media_type="application/json", headers=headers)


@router.get("/convergence/history", responses=refusals(404))
def read_history(run_id: str, service: ServiceOf) -> Response:
    """Every evaluation so far, oldest first: ``{"evaluations": [...]}``."""
    service.reader.run(run_id)
    text = ", ".join(service.reader.reports(run_id))
    return Response(f'{{"evaluations": [{text}]}}', media_type="application/json")


@router.get("/modes", responses={**array_answer("(n, n_fields, n_points), in field units"), **refusals(404, 406, 422)})
def read_modes(run_id: str, service: ServiceOf, n: Count = None, accept: Accept = None) -> Response:
    """The leading modes, orthonormal under the weights."""
    source = take_newest(service, run_id)

    def done() -> None:
        service.leases.give_back(run_id, source.n_snapshots)

    try:
        count = source.check_count("n", n or source.n_modes)
        shape = (count, len(source.declaration.fields), source.declaration.n_points)
        if wants(accept, NPY, "application/octet-stream", "application/json") == "application/json":
            check_json_size(count * source.declaration.n_rows)
            values = np.concatenate(list(source.pieces(range(count)))).reshape(shape)
            response = array_response(values, "application/json", source.n_snapshots)
            done()
            return response
    except BaseException:
        done()
        raise
    pieces = source.pieces(range(count))
    return streamed_response(shape, source.declaration.real_dtype, pieces, source.n_snapshots, done)


@router.get(
    "/modes/{k}.png",
    response_class=Response,
    responses={200: {"description": "picture of one field", "content": {"image/png": {}}}, **refusals(404, 422)},
)
def draw_mode(
    run_id: str, k: Number, service: ServiceOf, field: FieldName = None, checkpoint: Checkpoint = None
) -> Response:
    """A picture of one mode on its grid or points."""
    return mode_picture(service, run_id, k, field, checkpoint)


@router.get(
    "/modes/{k}",
    responses={**array_answer("(n_fields, n_points), in field units", picture=True), **refusals(404, 406, 422)},
)
def read_mode(
    run_id: str,
    k: Number,
    service: ServiceOf,
    field: FieldName = None,
    checkpoint: Checkpoint = None,
    accept: Accept = None,
) -> Response:
    """One mode."""
    if wants(accept, NPY, "application/octet-stream", "application/json", "image/png") == "image/png":
        return mode_picture(service, run_id, k, field, checkpoint)
    with chosen(service, run_id, checkpoint) as source:
        source.check_count("k", k)
        values = np.stack(list(source.pieces(range(k - 1, k))))
        return array_response(values, accept, source.n_snapshots)


@router.get(
    "/mean.png",
    response_class=Response,
    responses={200: {"description": "picture of one field", "content": {"image/png": {}}}, **refusals(404, 422)},
)
def draw_mean(run_id: str, service: ServiceOf, field: FieldName = None) -> Response:
    """A picture of the mean on its grid or points."""
    return mean_picture(service, run_id, field)


@router.get(
    "/mean",
    responses={**array_answer("(n_fields, n_points), in field units", picture=True), **refusals(404, 406, 422)},
)
def read_mean(run_id: str, service: ServiceOf, field: FieldName = None, accept: Accept = None) -> Response:
    """The mean of all snapshots in the basis."""
    if wants(accept, NPY, "application/octet-stream", "application/json", "image/png") == "image/png":
        return mean_picture(service, run_id, field)
    with newest(service, run_id) as source:
        values = np.stack([source.mean_field(one.name) for one in source.declaration.fields])
        return array_response(values, accept, source.n_snapshots)


@router.get("/singular-values", responses={**array_answer("(rank,), descending"), **refusals(404, 406)})
def read_singular_values(run_id: str, service: ServiceOf, accept: Accept = None) -> Response:
    """Singular values of the weighted fluctuations."""
    with newest(service, run_id) as source:
        return array_response(np.asarray(source.array("singular_value")[...]), accept, source.n_snapshots)


@router.get(
    "/coefficients",
    responses={**array_answer("(n_snapshots, n); as JSON the times come with them"), **refusals(404, 406, 422)},
)
def read_coefficients(
    run_id: str,
    service: ServiceOf,
    n: Count = None,
    last: Last = None,
    checkpoint: Checkpoint = None,
    accept: Accept = None,
) -> Response:
    """Temporal coefficients of the leading modes; their times are at ``/times``."""
    with chosen(service, run_id, checkpoint) as source:
        count = source.check_count("n", n or source.n_modes)
        stored = source.array("coefficient")
        first = max(0, stored.shape[0] - last) if last else 0
        values = np.asarray(stored[first:, :count])
        if wants(accept, NPY, "application/octet-stream", "application/json") != "application/json":
            return array_response(values, accept, source.n_snapshots)
        times = json_text(np.asarray(source.array("time")[first:]))
        text = f'{{"times": {times}, "coefficients": {json_text(values)}}}'
        headers = {SNAPSHOTS_HEADER: str(source.n_snapshots)}
        return Response(text, media_type="application/json", headers=headers)


@router.get("/times", responses={**array_answer("(n_snapshots,), in the unit of the run"), **refusals(404, 406)})
def read_times(run_id: str, service: ServiceOf, accept: Accept = None) -> Response:
    """Times of the snapshots, one for each row of the coefficients."""
    with newest(service, run_id) as source:
        return array_response(np.asarray(source.array("time")[...]), accept, source.n_snapshots)


@router.get("/checkpoints", responses=refusals(404))
def list_checkpoints(run_id: str, service: ServiceOf) -> CheckpointList:
    """Checkpoints that are kept, newest first; older ones are thinned geometrically."""
    service.reader.run(run_id)
    return CheckpointList(
        checkpoints=[
            CheckpointResource(
                n_snapshots=record.n_snapshots,
                at=record.at,
                n_bytes=record.n_bytes,
                archive=f"/v1/runs/{run_id}/checkpoints/{record.n_snapshots}/archive",
            )
            for record in service.reader.checkpoints(run_id)
        ]
    )


@router.get(
    "/checkpoints/{n_snapshots}/archive",
    response_class=Response,
    responses={200: {"description": "a zipped zarr store", "content": {"application/zip": {}}}, **refusals(404)},
)
def read_archive(run_id: str, n_snapshots: Annotated[int, Path(ge=0, le=10**12)], service: ServiceOf) -> Response:
    """A whole checkpoint: unpack it and open ``fields.zarr`` in it with any reader of zarr v3."""
    if n_snapshots not in (record.n_snapshots for record in service.reader.checkpoints(run_id)):
        service.reader.run(run_id)
        raise Problem(
            "not-found",
            f"run {run_id} has no checkpoint at {n_snapshots} snapshots; GET /v1/runs/{run_id}/checkpoints "
            "lists those kept",
        )
    source = take(service, run_id, n_snapshots)

    def parts() -> Iterator[bytes]:
        return zipped(source.path, lambda: service.leases.give_back(run_id, n_snapshots))

    headers = {
        "Content-Disposition": f'attachment; filename="{run_id}-{n_snapshots}.zip"',
        SNAPSHOTS_HEADER: str(n_snapshots),
    }
    return StreamingResponse(parts(), media_type="application/zip", headers=headers)
