"""What is exported: scalar fields by name on the points of a run, each read only when its turn comes."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt

from service.core import Service
from service.problems import Problem
from service.results import Numbers, Source
from service.shelf import load_array
from streaming.declaration import RectilinearGrid, RunDeclaration, UniformGrid
from streaming.grid import grid_axes

Array = npt.NDArray[np.float64]

PIECE_ROWS = 65536  # of the coefficients, which grow with the run, at once


@dataclass(frozen=True)
class Place:
    """Where the points of a run are.

    Attributes
    ----------
    axes : along x, y, z, for a grid; an axis that the grid has not holds one zero
    positions : (n_points, 3) for scattered points
    triangles : (n, 3) numbers of points that form a surface, where they were given
    """

    declaration: RunDeclaration
    axes: tuple[Array, Array, Array] | None
    positions: Array | None
    triangles: npt.NDArray[np.int64] | None = None

    @property
    def suffix(self) -> str:
        """Suffix of the VTK XML file that holds such points."""
        if isinstance(self.declaration.grid, UniformGrid):
            return "vti"
        return "vtr" if isinstance(self.declaration.grid, RectilinearGrid) else "vtp"


@dataclass(frozen=True)
class Scalar:
    """A field by name; ``read`` gives its values (n_points,) of type ``dtype``."""

    name: str
    dtype: np.dtype[Any]
    read: Callable[[], Numbers]


def place_of(service: Service, run_id: str, declaration: RunDeclaration) -> Place:
    """Points of a run. Raises the 422 problem when nothing is known of them."""
    axes = grid_axes(declaration)
    if axes is not None:
        x, y, z = [*reversed(axes), *[np.zeros(1)] * 3][:3]
        return Place(declaration, (x, y, z), None)
    positions = load_array(service.folders.run(run_id).array("positions"))
    if positions is None:
        raise Problem(
            "no-place",
            f"run {run_id} was declared with a grid of kind {declaration.grid.kind} and without positions; its arrays "
            "are there as NPY",
        )
    padded = np.zeros((len(positions), 3))
    padded[:, : positions.shape[1]] = positions
    triangles = load_array(service.folders.run(run_id).array("triangles"))
    return Place(declaration, None, padded, None if triangles is None else triangles.astype(np.int64))


def mode_scalars(source: Source, modes: range) -> list[Scalar]:
    """Every field of some modes (counted from 0), named ``u_mode_1``."""
    d = source.declaration
    return [
        Scalar(f"{field.name}_mode_{k + 1}", d.real_dtype, partial(source.mode_field, k, field.name))
        for k in modes
        for field in d.fields
    ]


def mean_scalars(source: Source) -> list[Scalar]:
    """Every field of the mean, named ``u_mean``."""
    return [
        Scalar(f"{field.name}_mean", np.dtype(np.float64), partial(source.mean_field, field.name))
        for field in source.declaration.fields
    ]


def low_order_scalars(source: Source, amplitudes: Array) -> list[Scalar]:
    """Every field rebuilt from the leading modes with these amplitudes (n_modes,), under its own name."""
    return [
        Scalar(field.name, np.dtype(np.float64), partial(_low_order_field, source, amplitudes, field.name))
        for field in source.declaration.fields
    ]


def low_order_amplitudes(source: Source, snapshots: npt.NDArray[np.intp], n_modes: int) -> Array:
    """Coefficients (n, n_modes) of some snapshots about the mean of all snapshots.

    Those of the checkpoint are about the mean of the retained record; what differs between the two means lies, as far
    as the modes reach, in the mean of the coefficients over all snapshots, which is taken off.
    """
    stored = source.array("coefficient")
    total, chosen = np.zeros(n_modes), np.zeros((len(snapshots), n_modes))
    for start in range(0, stored.shape[0], PIECE_ROWS):
        rows = np.asarray(stored[start : start + PIECE_ROWS, :n_modes])
        total += rows.sum(axis=0)
        here = (snapshots >= start) & (snapshots < start + len(rows))
        chosen[here] = rows[snapshots[here] - start]
    amplitudes: Array = chosen - total / stored.shape[0]
    return amplitudes


def _low_order_field(source: Source, amplitudes: Array, field: str) -> Numbers:
    """Mean + sum of a_k times mode k, (n_points,) float64."""
    values: Array = source.mean_field(field).astype(np.float64)
    for k, amplitude in enumerate(amplitudes):
        values += amplitude * source.mode_field(k, field)
    return values


def table_rows(source: Source, n: int, first: int) -> Iterator[tuple[Array, Array]]:
    """Times (k,) and coefficients (k, n) from snapshot ``first`` on, in pieces."""
    times, stored = source.array("time"), source.array("coefficient")
    for start in range(first, stored.shape[0], PIECE_ROWS):
        part = slice(start, start + PIECE_ROWS)
        yield np.asarray(times[part]), np.asarray(stored[part, :n])
