"""Where the points of a run are, from its grid or from the positions given beside it."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from streaming.declaration import RectilinearGrid, RunDeclaration, UniformGrid

Array = npt.NDArray[np.float64]


def grid_axes(declaration: RunDeclaration) -> list[Array] | None:
    """Return the coordinates along each axis of a grid, slowest first, or None when there is no grid."""
    grid = declaration.grid
    if isinstance(grid, UniformGrid):
        origin = grid.origin or [0.0] * len(grid.shape)
        return [np.asarray(o + h * np.arange(n)) for o, h, n in zip(origin, grid.spacing, grid.shape, strict=True)]
    if isinstance(grid, RectilinearGrid):
        return [np.asarray(axis, dtype=np.float64) for axis in grid.axes]
    return None


def point_positions(declaration: RunDeclaration, positions: Array | None) -> Array | None:
    """Return the position of every point, (n_points, d), columns x, y, z, or None when nothing is known."""
    axes = grid_axes(declaration)
    if axes is None:
        return positions
    lattice = np.meshgrid(*axes, indexing="ij")
    return np.stack([coordinate.reshape(-1) for coordinate in reversed(lattice)], axis=1)
