"""Checkpoints: immutable directories of one zarr v3 group, with the results for readers and the state for going on.

A manifest of digests lies beside the group ``fields.zarr``. The root of the group holds what people read (modes,
mean, energies, coefficients, with named dimensions and units, for any reader of the format); the group ``state``
holds the exact arrays from which a stream goes on bit for bit.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import zarr
from zarr.codecs import Crc32cCodec

from streaming.declaration import RunDeclaration
from streaming.errors import CheckpointError
from streaming.files import check_manifest, whole_directory
from streaming.grid import grid_axes

if TYPE_CHECKING:
    from streaming.stream import SnapshotStream

Numbers = npt.NDArray[Any]

VERSION = 1
STORE = "fields.zarr"  # the group, beside the manifest that guards it
CHUNK_BYTES = 16 * 1024**2  # a chunk costs about a millisecond to write, whatever its size
MIN_MODES = 10  # modes written for readers: at least these, or twice the wanted ones; all are in the state
AXES = "zyx"


def save_checkpoint(stream: SnapshotStream, path: Path) -> None:
    """Write results and state of a stream to a new directory, whole or not at all."""
    with whole_directory(path) as folder:
        root = zarr.open_group(folder / STORE, mode="w-", zarr_format=3)
        root.attrs.update(_root_attributes(stream))
        if stream.n_applied:
            _write_results(root, stream)
        _write_state(root.create_group("state"), stream)


def read_state(path: Path) -> tuple[dict[str, Any], dict[str, Numbers]]:
    """Return attributes and arrays of the state in a checkpoint, after checking every file against the manifest.

    Raises
    ------
    CheckpointError
        if a file is damaged or missing, or the checkpoint is of another version
    """
    check_manifest(path)
    try:
        root = zarr.open_group(path / STORE, mode="r", zarr_format=3)
        state = root["state"]
        if not isinstance(state, zarr.Group):
            raise TypeError("state is not a group")
        arrays = {name: np.asarray(array[...]) for name, array in state.arrays()}
        attributes = {**root.attrs.asdict(), **state.attrs.asdict()}
    except (KeyError, ValueError, TypeError, FileNotFoundError) as error:
        raise CheckpointError(f"{path} cannot be read as a checkpoint: {error}") from error
    version = attributes.get("slackwater_checkpoint")
    if version != VERSION:
        raise CheckpointError(f"{path} is a checkpoint of version {version!r}, this program reads {VERSION}")
    return attributes, arrays


def _root_attributes(stream: SnapshotStream) -> dict[str, Any]:
    return {
        "Conventions": "CF-1.11",
        "title": stream.declaration.name,
        "slackwater_checkpoint": VERSION,
        "declaration": stream.declaration.model_dump_json(),
        "n_snapshots": stream.n_applied,
        "comment": "Settled modes mean that the sampling of what was recorded suffices; they say nothing of mesh, "
        "model, calibration or of states that the run has not visited.",
    }


def _write_state(group: zarr.Group, stream: SnapshotStream) -> None:
    attributes, arrays = stream.export()
    group.attrs.update(attributes)
    for name, values in arrays.items():
        _write(group, name, values, None)


def _write_results(root: zarr.Group, stream: SnapshotStream) -> None:
    d = stream.declaration
    root.attrs["convergence"] = json.dumps(stream.convergence().model_dump(mode="json"))
    dims = _write_grid(root, d, stream.positions)
    shape = d.grid_shape
    modes = stream.modes(min(d.rank, max(MIN_MODES, 2 * d.criterion.n_modes)))
    mean = stream.mean()
    for k, field in enumerate(d.fields):
        values = modes[:, k].reshape(-1, *shape)
        _write(root, f"mode_{field.name}", values, ("mode", *dims), long_name=f"POD mode of {field.name}")
        average = mean[k].reshape(shape)
        _write(root, f"mean_{field.name}", average, dims, units=field.unit, long_name=f"mean of {field.name}")
    values = stream.singular_values()
    _write(root, "singular_value", values, ("rank",), long_name="singular value of the weighted fluctuations")
    _write(root, "mode", np.arange(1, len(modes) + 1), ("mode",), long_name="mode number")
    times, coefficients = stream.coefficients(len(modes))
    _write(root, "time", times, ("time",), long_name="time", axis="T", time_unit=d.time.unit)
    _write(root, "coefficient", coefficients, ("time", "mode"), long_name="temporal coefficient")


def _write_grid(root: zarr.Group, d: RunDeclaration, positions: Numbers | None) -> tuple[str, ...]:
    """Write the coordinates of the points and return the names of their dimensions."""
    axes = grid_axes(d)
    if axes is None:
        for axis, values in zip("xyz", [] if positions is None else positions.T, strict=False):
            _write(root, axis, values, ("point",), long_name=f"{axis} coordinate", units="m")
        return ("point",)
    names = tuple(AXES[-len(axes) :])
    for name, values in zip(names, axes, strict=True):
        _write(root, name, values, (name,), long_name=f"{name} coordinate", axis=name.upper(), units="m")
    return names


def _write(group: zarr.Group, name: str, values: Numbers, dims: tuple[str, ...] | None, **attributes: Any) -> None:
    array = group.create_array(
        name,
        shape=values.shape,
        dtype=values.dtype,
        chunks=_chunks(values.shape, values.dtype.itemsize),
        compressors=[Crc32cCodec()],
        fill_value=np.nan if values.dtype.kind == "f" else 0,
        dimension_names=dims,
        attributes=attributes or None,
    )
    if values.size:
        array[...] = values


def _chunks(shape: tuple[int, ...], itemsize: int) -> tuple[int, ...]:
    """Chunks of about CHUNK_BYTES, whole along the last axes and cut along the first ones."""
    chunks = [max(1, n) for n in shape]
    for axis in range(len(chunks)):
        rest = int(np.prod(chunks[axis + 1 :], dtype=np.int64)) * itemsize
        chunks[axis] = min(chunks[axis], max(1, CHUNK_BYTES // max(rest, 1)))
        if rest <= CHUNK_BYTES:
            break
    return tuple(chunks)
