"""zarr directories, versions 2 and 3: a group of named arrays, or one array."""

from __future__ import annotations

import logging
from pathlib import Path
from typing import Any

import zarr

from service.feeding.variables import UNNAMED, DataFile, FeedError, Values, Variable, slicer

logger = logging.getLogger("slackwater")


def read(path: Path) -> DataFile:
    """Open a zarr directory; arrays in groups go by their path. Raises FeedError."""
    try:
        opened = zarr.open(path, mode="r")
        if isinstance(opened, zarr.Array):
            return DataFile(path, {UNNAMED: _variable(path, UNNAMED, opened)})
        members = {name: item for name, item in opened.members(max_depth=None) if isinstance(item, zarr.Array)}
    except (OSError, ValueError, KeyError) as error:
        raise FeedError(f"{path} cannot be read as zarr: {error}") from error
    return DataFile(path, {name: _variable(path, name, item) for name, item in members.items()})


def _variable(path: Path, name: str, array: Any) -> Variable:
    attributes = array.attrs.asdict()
    names = getattr(array.metadata, "dimension_names", None) or attributes.get("_ARRAY_DIMENSIONS") or ()
    warned = False

    def cut(axis: int, start: int, stop: int) -> Values:
        nonlocal warned
        if not warned:
            _warn_of_missing(path, name, array)
            warned = True
        return slicer(array)(axis, start, stop)

    dims = tuple(names) if len(names) == array.ndim else ()
    return Variable(name, tuple(array.shape), array.dtype, cut, dims, str(attributes.get("units", "")))


def _warn_of_missing(path: Path, name: str, array: Any) -> None:
    """A chunk that is not there reads as the fill value: often meant so, sometimes a loss."""
    missing = int(array.nchunks) - int(array.nchunks_initialized)
    if missing:
        logger.warning(
            "%s: %d of %d chunks of %s are not stored and read as %s; if they were lost, restore them first",
            path,
            missing,
            array.nchunks,
            name,
            array.fill_value,
        )
