"""HDF5 files, and NetCDF-4 files, which are HDF5 with the conventions of CF on top."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from service.feeding.variables import DataFile, FeedError, Values, Variable, slicer

MAX_DATASETS = 10_000  # listing more takes longer than anybody waits
NEEDED = (
    "{path} needs the package h5py, which is not installed: pip install 'slackwater[readers]' (or pip install h5py)"
)


def read(path: Path) -> DataFile:
    """Open an HDF5 file; datasets go by their path without the leading slash. Raises FeedError."""
    try:
        import h5py
    except ModuleNotFoundError as error:
        raise FeedError(NEEDED.format(path=path)) from error
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        raise FeedError(f"{path} cannot be read as HDF5: {error}") from error
    found: dict[str, Variable] = {}

    def visit(name: str, item: Any) -> bool | None:
        if isinstance(item, h5py.Dataset) and item.shape is not None and item.dtype.kind in "fiu":
            found[name] = _variable(name, item)
        return True if len(found) >= MAX_DATASETS else None

    file.visititems(visit)
    return DataFile(path, found, file.close)


def _variable(name: str, dataset: Any) -> Variable:
    attributes = dict(dataset.attrs)
    dims = tuple(_dimension(dataset, axis) for axis in range(len(dataset.shape)))
    return cf_variable(name, dataset, dataset.dtype, attributes, dims)


def cf_variable(
    name: str, stored: Any, dtype: np.dtype[Any], attributes: dict[str, Any], dims: tuple[str | None, ...]
) -> Variable:
    """A variable with the attributes of CF: packed and missing values are turned as they are read."""
    cut = slicer(stored)
    if any(key in attributes for key in ("scale_factor", "add_offset", "_FillValue", "missing_value")):
        dtype = dtype if dtype.kind == "f" else np.dtype(np.float64)

        def turned(axis: int, start: int, stop: int) -> Values:
            return unpacked(slicer(stored)(axis, start, stop), attributes)

        cut = turned
    return Variable(name, tuple(stored.shape), np.dtype(dtype), cut, dims, as_text(attributes.get("units", "")))


def unpacked(values: Values, attributes: dict[str, Any]) -> Values:
    """Values as CF means them: missing ones NaN, packed ones scaled (CF 1.11, sections 2.5.1 and 8.1)."""
    result = values if values.dtype.kind == "f" else values.astype(np.float64)
    missing = [np.asarray(attributes[key]).reshape(-1) for key in ("_FillValue", "missing_value") if key in attributes]
    if missing:
        result = np.where(np.isin(values, np.concatenate(missing)), np.asarray(np.nan, result.dtype), result)
    scale, offset = (np.asarray(attributes.get(key, plain)).reshape(-1)[0] for key, plain in _PACKING)
    if scale == 1.0 and offset == 0.0:
        return result
    return np.asarray(result * scale + offset)


_PACKING = (("scale_factor", 1.0), ("add_offset", 0.0))


def as_text(value: Any) -> str:
    """An attribute as text, whatever type the file gives it."""
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)


def _dimension(dataset: Any, axis: int) -> str | None:
    """Name of the dimension scale of an axis; of a scale itself, its own name."""
    try:
        scales = dataset.dims[axis]
        if len(scales):
            return str(scales[0].name).lstrip("/")
    except (RuntimeError, KeyError, ValueError):
        return None
    own = dataset.attrs.get("CLASS")
    return str(dataset.name).lstrip("/") if own is not None and as_text(own) == "DIMENSION_SCALE" else None
