"""Strict reading of NPY headers: plain real floats in C order, sizes known before anything is allocated.

The format is numpy's own (NEP 1, versions 1.0, 2.0 and 3.0). numpy.load is not used on what a client sends: it
accepts types and sizes that no snapshot has, and ignores bytes after the array.
"""

from __future__ import annotations

import ast
import math
import re
from dataclasses import dataclass
from typing import Any

import numpy as np

MAGIC = b"\x93NUMPY"
# numpy pads version 1 headers to a multiple of 64 bytes; 128 is usual, and eight axes fit easily in 4096.
MAX_HEADER_BYTES = 4096
MAX_AXES = 8
FLOAT_TYPES = ("<f4", ">f4", "<f8", ">f8")
WHOLE_TYPES = ("<i4", ">i4", "<i8", ">i8")  # for numbers of points, never for snapshots
# A literal dictionary needs no other characters; refusing the rest keeps the parser's input harmless.
_HARMLESS = re.compile(r"^[\w\s'\"{}()\[\]:,.<>=|+-]*$", re.ASCII)
_LENGTH_BYTES = {1: 2, 2: 4, 3: 4}


class NpyError(ValueError):
    """The bytes are not an array that this service takes; the message says which part and what to do."""


@dataclass(frozen=True)
class ArrayHeader:
    """What an NPY header says, already checked."""

    dtype: np.dtype[Any]
    shape: tuple[int, ...]
    header_bytes: int

    @property
    def n_values(self) -> int:
        return math.prod(self.shape)

    @property
    def data_bytes(self) -> int:
        return self.n_values * self.dtype.itemsize


def header_length(start: bytes) -> int | None:
    """Bytes up to the first value, or None when ``start`` is too short to tell. Raises NpyError."""
    if start[: len(MAGIC)] != MAGIC[: len(start)]:
        raise NpyError(f"the body must start with the NPY magic string, it starts with {_shown(start[:8])}")
    if len(start) < 7:
        return None
    version = start[6]
    if version not in _LENGTH_BYTES:
        raise NpyError(f"NPY version {version} is not known; use 1, 2 or 3")
    fixed = 8 + _LENGTH_BYTES[version]
    if len(start) < fixed:
        return None
    if start[7] != 0:
        raise NpyError(f"NPY version {version}.{start[7]} is not known; use 1.0, 2.0 or 3.0")
    length = fixed + int.from_bytes(start[8:fixed], "little")
    if length > MAX_HEADER_BYTES:
        raise NpyError(f"the NPY header has {length} bytes, more than {MAX_HEADER_BYTES}")
    return length


def parse_header(header: bytes, types: tuple[str, ...] = FLOAT_TYPES) -> ArrayHeader:
    """Read a whole header, as long as `header_length` said, of an array of one of ``types``. Raises NpyError."""
    fixed = 8 + _LENGTH_BYTES[header[6]]
    members = _parse_literal(header[fixed:])
    if members.keys() != {"descr", "fortran_order", "shape"}:
        raise NpyError(f"the NPY header must hold descr, fortran_order and shape, it holds {sorted(members)}")
    if members["fortran_order"] is not False:
        raise NpyError("the array is in Fortran order; send numpy.ascontiguousarray(array)")
    return ArrayHeader(_parse_type(members["descr"], types), _parse_shape(members["shape"]), len(header))


def _parse_literal(text: bytes) -> dict[str, Any]:
    decoded = text.decode("latin-1")
    if not _HARMLESS.match(decoded):
        raise NpyError("the NPY header holds characters that no array header needs")
    try:
        value = ast.literal_eval(decoded.strip())
    except (ValueError, SyntaxError, RecursionError, MemoryError, TypeError) as error:
        raise NpyError("the NPY header is no literal dictionary") from error
    if not isinstance(value, dict) or not all(isinstance(key, str) for key in value):
        raise NpyError("the NPY header is no dictionary with text keys")
    return value


def _parse_type(descr: object, types: tuple[str, ...]) -> np.dtype[Any]:
    if descr not in types or not isinstance(descr, str):
        hint = "pickled objects are never read; " if isinstance(descr, str) and "O" in descr else ""
        raise NpyError(
            f"the array is of type {_shown(descr)}; {hint}send one of {', '.join(types)} (array.astype('float32'))"
        )
    return np.dtype(descr)


def _parse_shape(shape: object) -> tuple[int, ...]:
    if not isinstance(shape, tuple) or not all(type(n) is int and 0 <= n < 2**48 for n in shape):
        raise NpyError(f"the shape {_shown(shape)} is no tuple of counts")
    if not 1 <= len(shape) <= MAX_AXES:
        raise NpyError(f"the array has {len(shape)} axes; 1 to {MAX_AXES} are taken")
    return shape


def _shown(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 80 else text[:77] + "..."


def npy_header(shape: tuple[int, ...], dtype: np.dtype[Any]) -> bytes:
    """Header of an NPY 1.0 file, for arrays that are sent piece by piece."""
    body = f"{{'descr': '{dtype.str}', 'fortran_order': False, 'shape': {shape!r}, }}"
    padding = -(len(MAGIC) + 4 + len(body) + 1) % 64
    text = body.encode() + b" " * padding + b"\n"
    return MAGIC + b"\x01\x00" + len(text).to_bytes(2, "little") + text


def npy_bytes(array: np.ndarray[Any, Any]) -> bytes:
    """A whole array as an NPY 1.0 file."""
    return npy_header(array.shape, array.dtype) + np.ascontiguousarray(array).tobytes()
