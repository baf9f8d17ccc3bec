"""Results as files for other programs: VTK XML, NetCDF, CSV, and the low-order field of one snapshot."""

from __future__ import annotations

import io
import json
from collections.abc import Callable, Iterator
from typing import Annotated, Any

import numpy as np
from fastapi import APIRouter, Header, Path, Query, Response
from starlette.responses import StreamingResponse

from service import netcdf
from service.access import ServiceOf
from service.arrays import SNAPSHOTS_HEADER, array_response, json_text, wants
from service.bodies import NPY, array_answer, refusals
from service.core import Service
from service.exporting import (
    Scalar,
    low_order_amplitudes,
    low_order_scalars,
    mean_scalars,
    mode_scalars,
    place_of,
    table_rows,
)
from service.low_order import left_out_fraction, nearest
from service.problems import Problem
from service.results import Source, newest, take_newest
from service.series_archive import series_zip
from service.shelf import load_array
from service.vtk_xml import MEDIA_TYPE, VtkDocument

router = APIRouter(prefix="/v1/runs/{run_id}", tags=["export"])

VTK_SUFFIXES = ("vti", "vtr", "vtp")
TIME_HEADER, LEFT_OUT_HEADER = "Slackwater-Time", "Slackwater-Left-Out-Fraction"

Accept = Annotated[str | None, Header(description="application/x-npy, or application/json for small arrays")]
Number = Annotated[int, Path(ge=1, description="number of the mode, from 1")]
Count = Annotated[int | None, Query(ge=1, description="how many modes; those wanted by default")]
Time = Annotated[float, Query(allow_inf_nan=False, description="the snapshot nearest to this time is rebuilt")]


def _file_answer(description: str, media_type: str) -> dict[int | str, dict[str, Any]]:
    binary = {"schema": {"type": "string", "format": "binary"}}
    return {200: {"description": description, "content": {media_type: binary}}, **refusals(404, 422)}


# -- VTK XML: one route for each suffix, since the suffix is the kind of grid -------------------------------------


def _add_vtk_routes(suffix: str) -> None:
    responses = _file_answer("VTK XML file", MEDIA_TYPE)
    options: dict[str, Any] = {"response_class": Response, "responses": responses}

    @router.get(f"/modes.{suffix}", name=f"modes_{suffix}", **options)
    def modes_file(run_id: str, service: ServiceOf, n: Count = None) -> Response:
        """The leading modes as VTK XML: vti for uniform, vtr for rectilinear grids, vtp for points."""
        return _vtk(service, run_id, suffix, "modes", lambda source: mode_scalars(source, range(_count(source, n))))

    @router.get(f"/modes/{{k}}.{suffix}", name=f"mode_{suffix}", **options)
    def mode_file(run_id: str, k: Number, service: ServiceOf) -> Response:
        """One mode as VTK XML."""

        def scalars(source: Source) -> list[Scalar]:
            source.check_count("k", k)
            return mode_scalars(source, range(k - 1, k))

        return _vtk(service, run_id, suffix, f"mode-{k}", scalars)

    @router.get(f"/mean.{suffix}", name=f"mean_{suffix}", **options)
    def mean_file(run_id: str, service: ServiceOf) -> Response:
        """The mean as VTK XML."""
        return _vtk(service, run_id, suffix, "mean", mean_scalars)

    @router.get(f"/reconstruction.{suffix}", name=f"reconstruction_{suffix}", **options)
    def reconstruction_file(run_id: str, service: ServiceOf, time: Time, n: Count = None) -> Response:
        """The low-order field of the snapshot nearest to a time, as VTK XML."""

        def scalars(source: Source) -> list[Scalar]:
            return _rebuilt(source, nearest(source, time)[0], _count(source, n))

        return _vtk(service, run_id, suffix, "reconstruction", scalars)


for _suffix in VTK_SUFFIXES:
    _add_vtk_routes(_suffix)


def _vtk(service: Service, run_id: str, suffix: str, name: str, scalars: Callable[[Source], list[Scalar]]) -> Response:
    source = take_newest(service, run_id)
    try:
        place = place_of(service, run_id, source.declaration)
        if place.suffix != suffix:
            kind = source.declaration.grid.kind
            raise Problem("not-found", f"a grid of kind {kind} is exported as {name}.{place.suffix}, not as .{suffix}")
        document = VtkDocument(place, scalars(source))
    except BaseException:
        service.leases.give_back(run_id, source.n_snapshots)
        raise

    def parts() -> Iterator[bytes]:
        try:
            yield from document.parts()
        finally:
            service.leases.give_back(run_id, source.n_snapshots)

    headers = _file_headers(f"{run_id}-{name}.{suffix}", source.n_snapshots)
    return StreamingResponse(
        parts(), media_type=MEDIA_TYPE, headers=headers | {"Content-Length": str(document.n_bytes)}
    )


# -- the low-order field ------------------------------------------------------------------------------------------


@router.get(
    "/reconstruction",
    responses={**array_answer("(n_fields, n_points), in field units"), **refusals(404, 406, 422)},
)
def read_reconstruction(
    run_id: str, service: ServiceOf, time: Time, n: Count = None, accept: Accept = None
) -> Response:
    """The field that the leading modes rebuild for the snapshot nearest to a time.

    Two headers come with it: the time of that snapshot, and the share of the energy of the whole record that so many
    modes leave out. A single snapshot may be rebuilt better or worse than that.
    """
    with newest(service, run_id) as source:
        count = _count(source, n)
        snapshot, found = nearest(source, time)
        left_out = left_out_fraction(source, count)
        values = np.stack([one.read() for one in _rebuilt(source, snapshot, count)])
        if wants(accept, NPY, "application/octet-stream", "application/json") == "application/json":
            text = json_text(values)[:-1]
            text += f', "time": {found!r}, "n_modes": {count}, "left_out_fraction": {json.dumps(left_out)}}}'
            return Response(text, media_type="application/json", headers={SNAPSHOTS_HEADER: str(source.n_snapshots)})
        response = array_response(values, accept, source.n_snapshots)
        response.headers[TIME_HEADER] = repr(found)
        if left_out is not None:
            response.headers[LEFT_OUT_HEADER] = repr(left_out)
        return response


@router.get(
    "/reconstruction.zip",
    response_class=Response,
    responses=_file_answer("VTK XML files and a list of them with their times", "application/zip"),
)
def read_reconstruction_series(
    run_id: str,
    service: ServiceOf,
    start: Annotated[float, Query(allow_inf_nan=False, description="from this time on")],
    stop: Annotated[float, Query(allow_inf_nan=False, description="up to this time")],
    every: Annotated[int, Query(ge=1, description="only each so manieth snapshot")] = 1,
    n: Count = None,
) -> Response:
    """Low-order fields of a span of time as a series for viewers: unpack it and open ``series.pvd``."""
    source = take_newest(service, run_id)
    try:
        place = place_of(service, run_id, source.declaration)
        parts = series_zip(source, place, _count(source, n), (start, stop, every))
    except BaseException:
        service.leases.give_back(run_id, source.n_snapshots)
        raise

    def sent() -> Iterator[bytes]:
        try:
            yield from parts
        finally:
            service.leases.give_back(run_id, source.n_snapshots)

    headers = _file_headers(f"{run_id}-reconstruction.zip", source.n_snapshots)
    return StreamingResponse(sent(), media_type="application/zip", headers=headers)


# -- tables and NetCDF ----------------------------------------------------------------------------------------------


@router.get("/results.nc", response_class=Response, responses=_file_answer("NetCDF file", netcdf.MEDIA_TYPE))
def read_netcdf(run_id: str, service: ServiceOf, n: Count = None) -> Response:
    """Mean, modes, singular values, times and coefficients as one NetCDF file with the attributes of CF."""
    with newest(service, run_id) as source:
        positions = load_array(service.folders.run(run_id).array("positions"))
        raw = netcdf.netcdf_bytes(source, _count(source, n), positions)
        headers = _file_headers(f"{run_id}.nc", source.n_snapshots)
        return Response(raw, media_type=netcdf.MEDIA_TYPE, headers=headers)


@router.get("/coefficients.csv", response_class=Response, responses=_file_answer("table", "text/csv"))
def read_coefficients_table(
    run_id: str,
    service: ServiceOf,
    n: Count = None,
    last: Annotated[int | None, Query(ge=1, description="only so many of the newest snapshots")] = None,
) -> Response:
    """Times and temporal coefficients as text, one snapshot per line."""
    source = take_newest(service, run_id)
    try:
        count = _count(source, n)
        first = max(0, int(source.array("time").shape[0]) - last) if last else 0
    except BaseException:
        service.leases.give_back(run_id, source.n_snapshots)
        raise

    def lines() -> Iterator[str]:
        try:
            yield ",".join(["time", *(f"mode_{k + 1}" for k in range(count))]) + "\r\n"
            for times, rows in table_rows(source, count, first):
                buffer = io.StringIO(newline="")
                np.savetxt(buffer, np.column_stack([times, rows]), "%.17g", ",", "\r\n")
                yield buffer.getvalue()
        finally:
            service.leases.give_back(run_id, source.n_snapshots)

    headers = _file_headers(f"{run_id}-coefficients.csv", source.n_snapshots)
    return StreamingResponse(lines(), media_type="text/csv", headers=headers)


@router.get("/singular-values.csv", response_class=Response, responses=_file_answer("table", "text/csv"))
def read_singular_values_table(run_id: str, service: ServiceOf) -> Response:
    """Singular values as text, largest first."""
    with newest(service, run_id) as source:
        values = np.asarray(source.array("singular_value")[...])
        lines = ["mode,singular_value", *(f"{k + 1},{float(value)!r}" for k, value in enumerate(values))]
        headers = _file_headers(f"{run_id}-singular-values.csv", source.n_snapshots)
        return Response("\r\n".join([*lines, ""]), media_type="text/csv", headers=headers)


def _rebuilt(source: Source, snapshot: int, n_modes: int) -> list[Scalar]:
    amplitudes = low_order_amplitudes(source, np.array([snapshot]), n_modes)
    return low_order_scalars(source, amplitudes[0])


def _count(source: Source, n: int | None) -> int:
    """So many modes, checked; by default those that the criterion asks for."""
    return source.check_count("n", n or min(source.declaration.criterion.n_modes, source.n_modes))


def _file_headers(name: str, n_snapshots: int) -> dict[str, str]:
    return {"Content-Disposition": f'attachment; filename="{name}"', SNAPSHOTS_HEADER: str(n_snapshots)}
