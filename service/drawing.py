"""Pictures of modes and means, drawn from the newest checkpoint."""

from __future__ import annotations

import threading

from starlette.responses import Response

from service.arrays import SNAPSHOTS_HEADER
from service.core import Service
from service.problems import Problem
from service.results import Numbers, Source, chosen, newest
from service.shelf import load_array

_drawing = threading.Lock()  # the drawing library is not made for several threads, and one picture fills a core


def mode_picture(
    service: Service, run_id: str, mode: int, field: str | None, checkpoint: int | None = None
) -> Response:
    """One field of one mode (counted from 1) as a PNG. Raises the 404 and 422 problems."""
    from service.pictures import mode_png

    with chosen(service, run_id, checkpoint) as source, _drawing:
        source.check_count("k", mode)
        index = _field_index(source, field)
        spec = source.declaration.fields[index]
        values = source.mode_field(mode - 1, spec.name).reshape(source.declaration.grid_shape)
        title = f"mode {mode}, {spec.name}, {source.n_snapshots} snapshots"
        positions = _positions(service, run_id)
        png = mode_png(values, source.declaration.grid, title=title, unit=spec.unit, positions=positions)
        return _answer(png, source)


def mean_picture(service: Service, run_id: str, field: str | None) -> Response:
    """One field of the mean as a PNG. Raises the 404 and 422 problems."""
    from service.pictures import mean_png

    with newest(service, run_id) as source, _drawing:
        index = _field_index(source, field)
        spec = source.declaration.fields[index]
        values = source.mean_field(spec.name).reshape(source.declaration.grid_shape)
        title = f"mean {spec.name}, {source.n_snapshots} snapshots"
        positions = _positions(service, run_id)
        png = mean_png(values, source.declaration.grid, title=title, unit=spec.unit, positions=positions)
        return _answer(png, source)


def _field_index(source: Source, field: str | None) -> int:
    names = [one.name for one in source.declaration.fields]
    if field is None:
        return 0
    if field not in names:
        raise Problem("invalid-request", f"there is no field {field!r}; this run has {', '.join(names)}")
    return names.index(field)


def _positions(service: Service, run_id: str) -> Numbers | None:
    return load_array(service.folders.run(run_id).array("positions"))


def _answer(png: bytes, source: Source) -> Response:
    return Response(png, media_type="image/png", headers={SNAPSHOTS_HEADER: str(source.n_snapshots)})
