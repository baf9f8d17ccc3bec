"""NPZ files: named arrays in a zip file, read through without unpacking a whole member."""

from __future__ import annotations

import math
import zipfile
from pathlib import Path
from typing import Any

import numpy as np

from service.feeding.variables import DataFile, FeedError, Values, Variable


def read(path: Path) -> DataFile:
    """Open an NPZ file. Raises FeedError."""
    try:
        archive = zipfile.ZipFile(path)
        names = [name for name in archive.namelist() if name.endswith(".npy")]
        variables = [_variable(archive, path, name) for name in names]
    except (zipfile.BadZipFile, ValueError, EOFError, OSError) as error:
        raise FeedError(f"{path} cannot be read as NPZ: {error}") from error
    return DataFile(path, {one.name: one for one in variables}, archive.close)


def _variable(archive: zipfile.ZipFile, path: Path, member: str) -> Variable:
    name = member.removesuffix(".npy")
    with archive.open(member) as stream:
        version = np.lib.format.read_magic(stream)
        header = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
        shape, in_fortran_order, dtype = header(stream)
        offset = stream.tell()

    def cut(axis: int, start: int, stop: int) -> Values:
        if axis != 0 or in_fortran_order:
            raise FeedError(
                f"{path}: {name} must have its snapshots along the first axis; save it as NPY or so ordered"
            )
        row = math.prod(shape[1:])
        with archive.open(member) as stream:  # seeking back is what a zip member is slow at; forward it only reads
            stream.seek(offset + start * row * dtype.itemsize)
            raw = stream.read((stop - start) * row * dtype.itemsize)
        values: np.ndarray[Any, Any] = np.frombuffer(raw, dtype)
        return values.reshape(-1, *shape[1:])

    if dtype.hasobject:
        raise FeedError(f"{path}: {name} holds pickled objects, which are never read")
    return Variable(name, shape, dtype, cut)
