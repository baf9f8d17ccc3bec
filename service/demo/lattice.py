"""A two-dimensional flow solver: lattice Boltzmann, nine speeds, regularised collision.

Everything here is in lattice units: a cell is 1 long, a step takes 1, the density at rest is 1 and the speed of
sound is 1/sqrt(3). Populations are kept as their difference from the state at rest, so that single precision
holds the small pressure differences of a slow flow.

References
----------
Qian, d'Humieres and Lallemand (1992), Europhysics Letters 17, 479: the nine-speed lattice (from memory).
Latt and Chopard (2006), Mathematics and Computers in Simulation 72, 165: the regularised collision (from memory).
Guo, Zheng and Shi (2002), Chinese Physics 11, 366: the open boundaries by extrapolation of the non-equilibrium
part (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Single = npt.NDArray[np.float32]
Mask = npt.NDArray[np.bool_]
Index = npt.NDArray[np.intp]

# Directions (x, y) of the nine populations; OPPOSITE[k] points the other way.
DIRECTIONS = np.array([(0, 0), (1, 0), (0, 1), (-1, 0), (0, -1), (1, 1), (-1, 1), (-1, -1), (1, -1)])
OPPOSITE = np.array([0, 3, 4, 1, 2, 7, 8, 5, 6])
SHARES = np.array([4 / 9] + 4 * [1 / 9] + 4 * [1 / 36])

# Fastest flow that the scheme is used for: a Mach number of 0.42 at one point, where the error of the nearly
# incompressible scheme (of the order of the square of the Mach number) is no longer small.
MAX_SPEED = 0.24


def _moments_of_populations() -> Single:
    """(6, 9): density, flux x, flux y, and the stress xx, yy, xy less its value at rest for that density."""
    x, y = DIRECTIONS.T.astype(float)
    rows = [np.ones(9), x, y, x * x - 1 / 3, y * y - 1 / 3, x * y]
    return np.array(rows, dtype=np.float32)


def _populations_of_moments() -> Single:
    """(9, 6): the populations that carry given moments and nothing of higher order."""
    x, y = DIRECTIONS.T.astype(float)
    columns = [np.ones(9), 3 * x, 3 * y, 4.5 * (x * x - 1 / 3), 4.5 * (y * y - 1 / 3), 9 * x * y]
    return np.array(columns, dtype=np.float32).T * SHARES[:, None].astype(np.float32)


@dataclass(frozen=True)
class Openings:
    """What enters at the first column: the speed (ny,) along x; the last column is held at the density at rest."""

    inflow: Single


class Lattice:
    """Flow between two walls (first and last row), around solid cells, from the first column to the last.

    Parameters
    ----------
    solid : (ny, nx) cells that the flow cannot enter; their faces are half a cell from the nearest flow cell
    viscosity : (nx,) or a number, in lattice units; it may grow towards the outlet to swallow waves
    openings : inflow, or None for a box that closes on itself from the last column to the first
    """

    def __init__(self, solid: Mask, viscosity: npt.ArrayLike, openings: Openings | None) -> None:
        ny, nx = solid.shape
        self.shape = (ny, nx)
        self.openings = openings
        rates = np.broadcast_to(1.0 / (3.0 * np.asarray(viscosity, dtype=np.float64) + 0.5), (nx,))
        self._relax = rates.astype(np.float32)
        self._keep = (1.0 - rates).astype(np.float32)
        self._solid = np.flatnonzero(solid)
        self._into, self._from = _links(solid)
        self._shifts = [_shift(int(x), int(y), ny, nx) for x, y in DIRECTIONS]
        self._measure, self._rebuild = _moments_of_populations(), _populations_of_moments()
        self.moments: Single = np.zeros((6, ny, nx), dtype=np.float32)
        self._populations: Single = np.zeros((9, ny, nx), dtype=np.float32)
        self._moved: Single = np.zeros((9, ny, nx), dtype=np.float32)

    def start(self, speed: Single) -> None:
        """Set the whole lattice in motion along x with ``speed`` (ny,), density at rest, no stress."""
        self.moments[:] = 0.0
        self.moments[1] = speed[:, None]
        self._collide()

    def step(self) -> None:
        """Advance by one step: move, measure, open boundaries, collide."""
        self._move()
        np.matmul(self._measure, self._moved.reshape(9, -1), out=self.moments.reshape(6, -1))
        if self.openings is not None:
            self._open(self.openings)
        self.moments.reshape(6, -1)[:, self._solid] = 0.0
        self._collide()

    def velocity(self) -> tuple[Single, Single]:
        """Return the speeds (ny, nx) along x and y."""
        density = 1.0 + self.moments[0]
        return self.moments[1] / density, self.moments[2] / density

    def mass(self) -> float:
        """Return the mass in the flow cells, less what they would hold at rest."""
        return float(self._populations.sum(dtype=np.float64))

    def _collide(self) -> None:
        """Relax the stress towards its equilibrium flux x flux / density, and rebuild the populations."""
        density, x, y, xx, yy, xy = self.moments
        weight = self._relax / (1.0 + density)
        pairs = ((xx, x, x), (yy, y, y), (xy, x, y))
        stress = np.empty((3, *self.shape), dtype=np.float32)
        for out, (part, a, b) in zip(stress, pairs, strict=True):
            np.multiply(a, b, out=out)
            out *= weight
            out += self._keep * part
        rows = self._populations.reshape(9, -1)
        np.matmul(self._rebuild[:, :3], self.moments[:3].reshape(3, -1), out=rows)
        rows += self._rebuild[:, 3:] @ stress.reshape(3, -1)

    def _move(self) -> None:
        """Carry each population to its neighbour; what meets a wall returns to where it came from."""
        for k, pieces in enumerate(self._shifts):
            for target, source in pieces:
                self._moved[k][target] = self._populations[k][source]
        self._moved.reshape(-1)[self._into] = self._populations.reshape(-1)[self._from]

    def _open(self, openings: Openings) -> None:
        """Set the moments of the first and of the last column; the deviation of the stress is the neighbour's."""
        m = self.moments
        for column, inner in ((0, 1), (-1, -2)):
            speed = m[1, :, inner] / (1.0 + m[0, :, inner]), m[2, :, inner] / (1.0 + m[0, :, inner])
            old = _flux_of_momentum(m[0, :, inner], *speed)
            if column == 0:
                density, speed = m[0, :, inner], (openings.inflow, np.zeros_like(openings.inflow))
            else:
                density = np.zeros_like(m[0, :, inner])
            new = _flux_of_momentum(density, *speed)
            m[0, :, column] = density
            m[1:3, :, column] = (1.0 + density) * np.stack(speed)
            m[3:, :, column] = m[3:, :, inner] + new - old


def _flux_of_momentum(density: Single, x: Single, y: Single) -> Single:
    """Equilibrium stress (3, ny) of a column: density times the products of the speeds."""
    flux: Single = (1.0 + density) * np.stack([x * x, y * y, x * y])
    return flux


def _shift(x: int, y: int, ny: int, nx: int) -> list[tuple[tuple[slice, slice], tuple[slice, slice]]]:
    """Slices (target, source) that move a field by (x, y); columns close on themselves, rows do not."""
    rows = slice(max(0, y), ny + min(0, y)), slice(max(0, -y), ny + min(0, -y))
    columns = [(slice(max(0, x), nx + min(0, x)), slice(max(0, -x), nx + min(0, -x)))]
    if x == 1:
        columns.append((slice(0, 1), slice(nx - 1, nx)))
    elif x == -1:
        columns.append((slice(nx - 1, nx), slice(0, 1)))
    return [((rows[0], target), (rows[1], source)) for target, source in columns]


def _links(solid: Mask) -> tuple[Index, Index]:
    """Flat places (into, from) of the populations that bounce back at walls and solid cells (half-way rule)."""
    ny, nx = solid.shape
    row, column = np.nonzero(~solid)
    into, out = [], []
    for k, (x, y) in enumerate(DIRECTIONS):
        upstream_row, upstream_column = row - y, (column - x) % nx
        outside = (upstream_row < 0) | (upstream_row >= ny)
        blocked = outside | solid[np.clip(upstream_row, 0, ny - 1), upstream_column]
        here = row[blocked] * nx + column[blocked]
        into.append(k * ny * nx + here)
        out.append(int(OPPOSITE[k]) * ny * nx + here)
    return np.concatenate(into), np.concatenate(out)
