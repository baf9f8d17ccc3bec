"""The variables of a file put in the order of a declaration: snapshots, fields, points."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.feeding.choice import TIME_NAMES, Choice
from service.feeding.variables import DataFile, FeedError, Values, Variable
from streaming.declaration import RunDeclaration
from streaming.intake import accepted_shapes

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Arranged:
    """The snapshots of one open file.

    Attributes
    ----------
    n_snapshots : how many
    times : (n_snapshots,) or None
    """

    file: DataFile
    declaration: RunDeclaration
    sources: tuple[tuple[Variable, int | None], ...]
    n_snapshots: int
    times: Array | None

    def read(self, start: int, stop: int) -> Values:
        """Snapshots [start, stop), (n, n_fields, n_points), in the dtype of the run. Raises FeedError."""
        d = self.declaration
        n = stop - start
        parts = [_snapshots_first(variable, axis, start, stop) for variable, axis in self.sources]
        with np.errstate(over="ignore"):  # what does not fit float32 becomes infinite, which the service names
            if len(parts) == 1:
                return np.ascontiguousarray(parts[0].reshape(n, len(d.fields), d.n_points), d.real_dtype)
            return np.stack([part.reshape(n, d.n_points) for part in parts], axis=1).astype(d.real_dtype, copy=False)


def arrange(file: DataFile, choice: Choice, declaration: RunDeclaration) -> Arranged:
    """Find the fields and the times of a declared run in a file. Raises FeedError."""
    times = time_variable(file, choice)
    chosen = variables_of_fields(file, choice, [field.name for field in declaration.fields], times)
    shapes = _whole_shapes(declaration) if len(chosen) == 1 else _field_shapes(declaration)
    sources = tuple((one, _snapshot_axis(file, one, choice, times, shapes, declaration)) for one in chosen)
    counts = {1 if axis is None else one.shape[axis] for one, axis in sources}
    if len(counts) > 1:
        texts = ", ".join(one.text for one, _ in sources)
        raise FeedError(f"{file.path}: the fields have different numbers of snapshots: {texts}")
    n = counts.pop()
    return Arranged(file, declaration, sources, n, _read_times(file, times, n))


def time_variable(file: DataFile, choice: Choice) -> Variable | None:
    """The variable of the times: the one named, else one called time, t or times."""
    if choice.without_times:
        return None
    if choice.time is not None:
        return file.variable(choice.time)
    named = (file.variables.get(name) for name in TIME_NAMES)
    found = next((one for one in named if one is not None and len(one.shape) <= 1), None)
    if found is not None and not found.is_real:
        raise FeedError(
            f"{file.path}: {found.name} is of type {found.dtype}; write times as numbers in one unit, or leave "
            "them aside with --without-times"
        )
    return found


def variables_of_fields(file: DataFile, choice: Choice, fields: list[str], times: Variable | None) -> list[Variable]:
    """One variable for each field, or the one that holds them all. Raises FeedError."""
    if choice.fields:
        return _chosen(file, choice, fields)
    if all(name in file.variables for name in fields):
        return [file.variables[name] for name in fields]
    candidates = candidate_variables(file, times)
    if len(candidates) == 1:
        return candidates
    raise FeedError(
        f"{file.path}: which variable is which of the fields {', '.join(fields)}? Say --variable FIELD=VARIABLE for "
        f"each; the file holds {file.listing}"
    )


def candidate_variables(file: DataFile, times: Variable | None) -> list[Variable]:
    """Variables that may be fields: real, not the times, not a coordinate, not part of a larger table."""
    coordinates = {dim for one in file.variables.values() for dim in one.dims if dim is not None}
    found = [
        one
        for name, one in file.variables.items()
        if one.is_real and one is not times and name not in coordinates and len(one.shape) >= 1
    ]
    whole = [one for one in found if one.name == "data"]
    return whole or [one for one in found if len(one.shape) > 1] or found


def _chosen(file: DataFile, choice: Choice, fields: list[str]) -> list[Variable]:
    named = dict(choice.fields)
    variables = [file.variable(name) for _, name in choice.fields]
    if None in named:
        if len(variables) in (1, len(fields)):
            return variables
        raise FeedError(f"--variable names {len(variables)} variables, the run has the fields {', '.join(fields)}")
    if set(named) != set(fields):
        given = ", ".join(str(name) for name in named)
        raise FeedError(f"--variable gives the fields {given}; the run has {', '.join(fields)}")
    return [file.variable(named[name]) for name in fields]


def _whole_shapes(d: RunDeclaration) -> list[tuple[int, ...]]:
    """Shapes of one snapshot of all fields; a single field needs no axis of its own."""
    return accepted_shapes(d) + (_field_shapes(d) if len(d.fields) == 1 else [])


def _field_shapes(d: RunDeclaration) -> list[tuple[int, ...]]:
    return list(dict.fromkeys([(d.n_points,), d.grid_shape]))


def _snapshot_axis(
    file: DataFile,
    variable: Variable,
    choice: Choice,
    times: Variable | None,
    shapes: list[tuple[int, ...]],
    declaration: RunDeclaration,
) -> int | None:
    """The axis of time of a variable, None when it is one snapshot. Raises FeedError when its shape does not fit."""
    if not variable.is_real:
        raise FeedError(f"{file.path}: {variable.name} is of type {variable.dtype}; snapshots are real numbers")
    axis = None if choice.one_each else axis_of_time(file, variable, choice, times)
    if axis is not None and _fits(variable.shape[:axis] + variable.shape[axis + 1 :], shapes, declaration):
        return axis
    if choice.time_axis is None and _fits(variable.shape, shapes, declaration):
        return None
    wanted = " or ".join(str(list(shape)) for shape in dict.fromkeys(shapes))
    raise FeedError(
        f"{file.path}: {variable.text} is neither one snapshot of shape {wanted} nor a row of them along axis {axis}; "
        "say where time runs with --time-axis, or correct the declaration"
    )


def _fits(shape: tuple[int, ...], shapes: Iterable[tuple[int, ...]], d: RunDeclaration) -> bool:
    """Equal but for axes of length one; where nothing is known of the grid, points may lie along several axes."""
    plain = tuple(n for n in shape if n != 1)
    if plain in [tuple(n for n in one if n != 1) for one in shapes]:
        return True
    if d.grid.kind not in ("none", "points"):
        return False
    if len(d.fields) == 1 or (d.n_points,) in shapes:
        return math.prod(shape) == d.n_points
    return shape[:1] == (len(d.fields),) and math.prod(shape[1:]) == d.n_points


def axis_of_time(file: DataFile, variable: Variable, choice: Choice, times: Variable | None) -> int | None:
    """Number of the axis along which snapshots follow each other; None when the variable has no axes."""
    if not variable.shape:
        return None
    if isinstance(choice.time_axis, str):
        if choice.time_axis not in variable.dims:
            raise FeedError(
                f"{file.path}: {variable.name} has the dimensions {list(variable.dims)}, no {choice.time_axis}"
            )
        return variable.dims.index(choice.time_axis)
    if isinstance(choice.time_axis, int):
        if not -len(variable.shape) <= choice.time_axis < len(variable.shape):
            raise FeedError(f"{file.path}: {variable.text} has no axis {choice.time_axis}")
        return choice.time_axis % len(variable.shape)
    names = {name for one in ([times] if times else []) for name in (one.name, *one.dims) if name}
    return next((k for k, dim in enumerate(variable.dims) if dim in names), 0)


def _snapshots_first(variable: Variable, axis: int | None, start: int, stop: int) -> Values:
    """Snapshots [start, stop) of a variable with the axis of time in front."""
    if axis is None:
        return variable.whole()[np.newaxis]
    return np.moveaxis(variable.cut(axis, start, stop), axis, 0)


def _read_times(file: DataFile, variable: Variable | None, n_snapshots: int) -> Array | None:
    """The times, checked. Raises FeedError."""
    if variable is None:
        return None
    n = math.prod(variable.shape)
    if n != n_snapshots:
        raise FeedError(
            f"{file.path}: {variable.text} does not give one time for each of {n_snapshots} snapshots; name another "
            "with --time, or leave times aside with --without-times"
        )
    times = np.asarray(variable.whole(), np.float64).reshape(n)
    back = np.flatnonzero(~(np.diff(times) > 0))
    if not np.isfinite(times).all() or len(back):
        k = int(back[0]) if len(back) else int(np.flatnonzero(~np.isfinite(times))[0])
        raise FeedError(f"{file.path}: times must be finite and increase; look at {variable.name} near number {k}")
    return times
