"""Arrays to and from NPY bodies (numpy.lib.format, version 1.0), without a second copy of the data."""

from __future__ import annotations

import base64
import hashlib
import io
from collections.abc import Iterator
from typing import Any

import numpy as np
import numpy.typing as npt

CHUNK_BYTES = 1 << 20  # large enough for the socket, small beside any body worth sending

Values = npt.NDArray[np.floating[Any]]


class NpyBody:
    """An array as an NPY body that can be sent more than once.

    The values are sent from where they lie; only an array that is not C-ordered little-endian float32 or
    float64 is converted first. ``digest`` is the Content-Digest (RFC 9530) of header and values.
    """

    def __init__(self, values: npt.ArrayLike) -> None:
        self.values = as_real(values)
        header = io.BytesIO()
        np.lib.format.write_array_header_1_0(header, np.lib.format.header_data_from_array_1_0(self.values))
        self._header = header.getvalue()
        self.n_bytes = len(self._header) + self.values.nbytes
        self.digest = self._digest()

    def chunks(self) -> Iterator[bytes | memoryview]:
        """The header, then the values in pieces of `CHUNK_BYTES`."""
        yield self._header
        flat = self.values.reshape(-1).data.cast("B")
        for start in range(0, self.values.nbytes, CHUNK_BYTES):
            yield flat[start : start + CHUNK_BYTES]

    def headers(self) -> dict[str, str]:
        return {
            "Content-Type": "application/x-npy",
            "Content-Length": str(self.n_bytes),
            "Content-Digest": self.digest,
        }

    def _digest(self) -> str:
        running = hashlib.sha256()
        for chunk in self.chunks():
            running.update(chunk)
        return f"sha-256=:{base64.b64encode(running.digest()).decode('ascii')}:"


def as_real(values: npt.ArrayLike) -> Values:
    """C-ordered little-endian float32 or float64 of the same values; ValueError for anything not real."""
    array = np.asarray(values)
    if array.dtype.kind not in "fiub":
        raise ValueError(f"values must be real numbers, got dtype {array.dtype}")
    if array.size == 0:
        raise ValueError(f"nothing to send: shape {array.shape} holds no values")
    dtype = np.dtype("<f4") if array.dtype.kind == "f" and array.dtype.itemsize <= 4 else np.dtype("<f8")
    return np.ascontiguousarray(array, dtype=dtype)


def from_npy(body: bytes) -> npt.NDArray[Any]:
    """The array of an NPY body."""
    array: npt.NDArray[Any] = np.load(io.BytesIO(body), allow_pickle=False)
    return array
