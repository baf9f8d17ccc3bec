"""Results of a run as one NetCDF file (classic format with 64-bit offsets), with the attributes of CF."""

from __future__ import annotations

import io
import json
from typing import Any

import numpy as np
from scipy.io import netcdf_file

from service.problems import Problem
from service.results import Source
from streaming.declaration import RunDeclaration
from streaming.grid import grid_axes

MEDIA_TYPE = "application/x-netcdf"
MAX_NETCDF_BYTES = 512 * 2**20  # the file is made in memory; what is larger is in the checkpoint archive


def netcdf_bytes(source: Source, n_modes: int, positions: Any) -> bytes:
    """Mean, modes, singular values, times and coefficients. Raises the 422 problem when it is too large."""
    d = source.declaration
    n_snapshots = int(source.array("time").shape[0])
    needed = (n_modes + 2) * d.n_rows * 8 + n_snapshots * (n_modes + 1) * 8
    if needed > MAX_NETCDF_BYTES:
        raise Problem(
            "export-too-large",
            f"the file would have about {needed} bytes, at most {MAX_NETCDF_BYTES} are made; ask for fewer modes "
            "with n, or take the checkpoint archive",
            limit=MAX_NETCDF_BYTES,
        )
    buffer = io.BytesIO()
    file = netcdf_file(buffer, "w", version=2)
    _write_attributes(file, source)
    dims, coordinates = _write_points(file, d, positions)
    _write(file, "mode", np.arange(1, n_modes + 1, dtype=np.int32), ("mode",), long_name="mode number")
    for field in d.fields:
        more = {"coordinates": coordinates} if coordinates else {}
        mean = source.mean_field(field.name).reshape(d.grid_shape)
        _write(file, f"mean_{field.name}", mean, dims, long_name=f"mean of {field.name}", units=field.unit, **more)
        modes = np.asarray(source.array(f"mode_{field.name}")[:n_modes])
        _write(file, f"mode_{field.name}", modes, ("mode", *dims), long_name=f"POD mode of {field.name}", **more)
    _write_series(file, source, n_modes)
    file.flush()
    raw = buffer.getvalue()
    file.close()
    return raw


def _write_attributes(file: Any, source: Source) -> None:
    file.Conventions = b"CF-1.11"
    file.title = source.declaration.name.encode()
    file.source = b"Slackwater, evolving POD basis"
    file.n_snapshots = np.int32(min(source.n_snapshots, 2**31 - 1))
    file.declaration = json.dumps(source.declaration.model_dump(mode="json")).encode()
    file.comment = (
        b"Settled modes mean that the sampling of what was recorded suffices; they say nothing of mesh, model, "
        b"calibration or of states that the run has not visited."
    )


def _write_points(file: Any, d: RunDeclaration, positions: Any) -> tuple[tuple[str, ...], str]:
    """Write the coordinates; give the dimensions of a field, and the names of coordinates that are no dimensions."""
    axes = grid_axes(d)
    if axes is not None:
        names = tuple("zyx"[-len(axes) :])
        for name, values in zip(names, axes, strict=True):
            _write(file, name, values, (name,), long_name=f"{name} coordinate", axis=name.upper(), units="m")
        return names, ""
    file.createDimension("point", d.n_points)
    if positions is None:
        return ("point",), ""
    names = tuple("xyz"[: positions.shape[1]])
    for name, values in zip(names, positions.T, strict=True):
        _write(file, name, values, ("point",), long_name=f"{name} coordinate", units="m")
    return ("point",), " ".join(names)


def _write_series(file: Any, source: Source, n_modes: int) -> None:
    values = np.asarray(source.array("singular_value")[...])
    _write(file, "singular_value", values, ("rank",), long_name="singular value of the weighted fluctuations")
    times = np.asarray(source.array("time")[...])
    unit = source.declaration.time.unit
    _write(file, "time", times, ("time",), long_name="time", axis="T", time_unit=unit)
    coefficients = np.asarray(source.array("coefficient")[:, :n_modes])
    _write(file, "coefficient", coefficients, ("time", "mode"), long_name="temporal coefficient")


def _write(file: Any, name: str, values: Any, dims: tuple[str, ...], **attributes: str) -> None:
    for dim, length in zip(dims, values.shape, strict=True):
        if dim not in file.dimensions:
            file.createDimension(dim, length)
    variable = file.createVariable(name, values.dtype.newbyteorder(">"), dims)
    variable[:] = values
    for key, text in attributes.items():
        setattr(variable, key, text.encode())
