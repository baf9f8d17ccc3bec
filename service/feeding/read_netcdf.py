"""NetCDF files: the classic format by scipy, NetCDF-4 as the HDF5 that it is."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from scipy.io import netcdf_file

from service.feeding import read_hdf5
from service.feeding.variables import DataFile, FeedError, Variable

CLASSIC = b"CDF"


def read(path: Path) -> DataFile:
    """Open a NetCDF file of either kind. Raises FeedError."""
    try:
        with path.open("rb") as file:
            magic = file.read(4)
    except OSError as error:
        raise FeedError(f"{path} cannot be read: {error}") from error
    if magic[:3] != CLASSIC:
        return read_hdf5.read(path)
    if magic[3:] not in (b"\x01", b"\x02"):
        raise FeedError(f"{path} is NetCDF of kind CDF-5, which is not read here; convert it with nccopy -k netCDF-4")
    try:
        opened = netcdf_file(path, "r", mmap=True)
    except (OSError, ValueError, TypeError) as error:
        raise FeedError(f"{path} cannot be read as NetCDF: {error}") from error
    variables = {name: _variable(name, one) for name, one in opened.variables.items() if one.data.dtype.kind in "fiu"}
    return DataFile(path, variables, lambda: _close(opened, variables))


def _variable(name: str, stored: Any) -> Variable:
    plain = read_hdf5.cf_variable(name, stored, stored.data.dtype, dict(stored._attributes), tuple(stored.dimensions))
    # what is read must be a copy: the mapping cannot be closed while slices of it live
    return replace(plain, cut=lambda axis, start, stop: np.array(plain.cut(axis, start, stop)))


def _close(opened: Any, variables: dict[str, Variable]) -> None:
    """Let go of all views of the mapped file first, as scipy asks."""
    variables.clear()
    for one in opened.variables.values():
        one.data = None
    opened.close()
