"""Arrays as HTTP answers: NPY by default, JSON for small ones when asked."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Iterator
from typing import Any

import numpy as np
import numpy.typing as npt
from starlette.responses import Response, StreamingResponse

from service.bodies import NPY
from service.npy import npy_bytes, npy_header
from service.problems import Problem

# As text this is about 2 MB; larger arrays are for programs, which read NPY.
MAX_JSON_VALUES = 100_000
SNAPSHOTS_HEADER = "Slackwater-Snapshots"


def wants(accept: str | None, *offered: str) -> str:
    """The first offered media type when nothing else is asked for. Raises the 406 problem."""
    asked = [part.split(";")[0].strip().lower() for part in (accept or "*/*").split(",")]
    for media_type in asked:
        if media_type in offered:
            return media_type
        if media_type in ("*/*", "application/*", ""):
            return offered[0]
    raise Problem("not-acceptable", f"Accept {accept!r} names none of {', '.join(offered)}")


def array_response(values: npt.NDArray[Any], accept: str | None, n_snapshots: int) -> Response:
    """The whole array."""
    headers = {SNAPSHOTS_HEADER: str(n_snapshots)}
    if wants(accept, NPY, "application/json", "application/octet-stream") == "application/json":
        return Response(json_text(values), media_type="application/json", headers=headers)
    return Response(npy_bytes(values), media_type=NPY, headers=headers)


def check_json_size(n_values: int) -> None:
    """Raise the 406 problem when so many values are too many for text; asked before they are read."""
    if n_values > MAX_JSON_VALUES:
        raise Problem(
            "not-acceptable", f"{n_values} values are too many for JSON (at most {MAX_JSON_VALUES}); ask for {NPY}"
        )


def json_text(values: npt.NDArray[Any]) -> str:
    """``{"shape", "values"}``. Raises the 406 problem when it is too large."""
    check_json_size(values.size)
    finite = np.isfinite(values)
    plain = values.astype(object)
    plain[~finite] = None
    return json.dumps({"shape": list(values.shape), "values": plain.tolist()}, allow_nan=False)


def streamed_response(
    shape: tuple[int, ...],
    dtype: np.dtype[Any],
    pieces: Iterable[npt.NDArray[Any]],
    n_snapshots: int,
    done: Callable[[], None],
) -> Response:
    """An NPY file sent piece by piece; ``done`` is called when the last is sent or the client has gone."""
    header = npy_header(shape, dtype)
    length = len(header) + int(np.prod(shape, dtype=object)) * dtype.itemsize

    def parts() -> Iterator[bytes]:
        try:
            yield header
            for piece in pieces:
                yield np.ascontiguousarray(piece, dtype).tobytes()
        finally:
            done()

    headers = {SNAPSHOTS_HEADER: str(n_snapshots), "Content-Length": str(length)}
    return StreamingResponse(parts(), media_type=NPY, headers=headers)
