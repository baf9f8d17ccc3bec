"""A declaration completed from the data: what the file knows need not be written down again."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from typing import Any

import numpy as np
from pydantic import ValidationError

from service.feeding.arranging import axis_of_time, candidate_variables, time_variable
from service.feeding.choice import Choice
from service.feeding.variables import DataFile, FeedError, Variable
from streaming.declaration import RunDeclaration

EVEN_FRACTION = 1e-3  # of the step, up to which times and axes count as even


def complete(members: Mapping[str, Any], file: DataFile, choice: Choice) -> RunDeclaration:
    """Add name, fields, n_points, dtype, grid and time step where they are not given.

    Raises
    ------
    FeedError
        if the file does not fit what is given
    ValueError
        if what is given is no declaration
    """
    times = time_variable(file, choice)
    sources = _sources(file, choice, members, times)
    points = _point_shape(file, choice, sources, members, times)
    found: dict[str, Any] = {
        "name": file.path.stem[:120],
        "fields": [{"name": _field_name(one.name), "unit": one.unit[:40] or "1"} for one in sources],
        "n_points": math.prod(points),
        "dtype": "float64" if any(one.dtype.itemsize > 4 for one in sources) else "float32",
        "time": _time_axis(times),
    }
    grid = _grid_of(file, choice, sources[0], times) if len(points) > 1 else None
    if grid is not None and "n_points" not in members:
        found["grid"] = grid
    try:
        return RunDeclaration.model_validate({**found, **members})
    except ValidationError as error:
        first = error.errors()[0]
        place = ".".join(str(part) for part in first["loc"]) or "declaration"
        raise ValueError(f"{place}: {first['msg']}; see --declaration, --modes and --max-angle-deg") from error


def _sources(file: DataFile, choice: Choice, members: Mapping[str, Any], times: Variable | None) -> list[Variable]:
    """The variables that hold the fields."""
    if choice.fields:
        return [file.variable(name) for _, name in choice.fields]
    names = [str(field.get("name")) for field in members.get("fields", []) if isinstance(field, Mapping)]
    if names and all(name in file.variables for name in names):
        return [file.variables[name] for name in names]
    candidates = candidate_variables(file, times)
    if not candidates:
        raise FeedError(f"{file.path}: snapshots are real numbers along at least one axis; it holds {file.listing}")
    if names and len(candidates) != 1:
        raise FeedError(f"{file.path}: say --variable FIELD=VARIABLE for each of {names}; it holds {file.listing}")
    if len({_without_time(file, choice, one, times) for one in candidates}) > 1:
        raise FeedError(f"{file.path}: which of {file.listing} are the fields? Name them with --variable")
    return candidates


def _without_time(file: DataFile, choice: Choice, one: Variable, times: Variable | None) -> tuple[int, ...]:
    axis = None if choice.one_each else axis_of_time(file, one, choice, times)
    return one.shape if axis is None else one.shape[:axis] + one.shape[axis + 1 :]


def _point_shape(
    file: DataFile,
    choice: Choice,
    sources: list[Variable],
    members: Mapping[str, Any],
    times: Variable | None,
) -> tuple[int, ...]:
    """Shape of one field: of a source without the axis of time, and without that of the fields where one holds all."""
    one = sources[0]
    shape = _without_time(file, choice, one, times)
    n_fields = len(members.get("fields", sources))
    if len(sources) == 1 and n_fields > 1:
        if shape[:1] == (n_fields,):
            return shape[1:]
        if math.prod(shape) % n_fields:
            raise FeedError(f"{file.path}: {one.text} does not divide into {n_fields} fields")
        return (math.prod(shape) // n_fields,)
    return shape


def _field_name(name: str) -> str:
    """The last part of a path, in the letters that field names have."""
    plain = re.sub(r"[^A-Za-z0-9_]", "_", name.rsplit("/", 1)[-1])[:40]
    return plain if re.match(r"[A-Za-z]", plain) else f"f_{plain}"[:40]


def _time_axis(times: Variable | None) -> dict[str, Any]:
    """Unit and, when it is even, step of the times."""
    if times is None or not times.shape or times.shape[0] < 2:
        return {}
    values = np.asarray(times.whole(), np.float64)
    step = float(values[-1] - values[0]) / (len(values) - 1)
    even = step > 0 and np.abs(np.diff(values) - step).max() <= EVEN_FRACTION * step
    unit = re.split(r"\s+since\b", times.unit)[0][:40]
    return ({"step": step} if even else {}) | ({"unit": unit} if unit else {})


def _grid_of(file: DataFile, choice: Choice, source: Variable, times: Variable | None) -> dict[str, Any] | None:
    """A grid, when every axis of a field has a coordinate of its own name that increases."""
    axis = None if choice.one_each else axis_of_time(file, source, choice, times)
    axes = []
    for k, dim in enumerate(source.dims):
        if k == axis:
            continue
        coordinate = file.variables.get(dim or "")
        if coordinate is None or coordinate.shape != (source.shape[k],):
            return None
        values = np.asarray(coordinate.whole(), np.float64)
        if not (np.diff(values) > 0).all():
            return None
        axes.append(values)
    if not 1 <= len(axes) <= 3 or any(len(one) < 2 for one in axes):
        return None
    steps = [float(one[-1] - one[0]) / (len(one) - 1) for one in axes]
    if all(np.abs(np.diff(one) - h).max() <= EVEN_FRACTION * h for one, h in zip(axes, steps, strict=True)):
        return {
            "kind": "uniform",
            "shape": [len(one) for one in axes],
            "spacing": steps,
            "origin": [float(one[0]) for one in axes],
        }
    return {"kind": "rectilinear", "axes": [one.tolist() for one in axes]}
