"""The evolving basis: tall rows, singular values and energies, moved on by one block at a time."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from streaming.declaration import RunDeclaration
from streaming.probes import N_PROBES
from streaming.tall import FIRST_ROW, TallRows, one_blas_thread
from streaming.update import GRAM_CONDITION, Update, update_from_factor, update_from_gram

Float = npt.NDArray[np.floating]
Array = npt.NDArray[np.float64]

# Between looks at its orthonormality the basis may be off by this many eps of its dtype, see `Update.bend`.
STRAIGHT_BEND = 1e3
STRAIGHT_BLOCKS = 16  # at the least, its own products are computed once in so many blocks

_COUNTERS = ("n_snapshots", "n_blocks", "total_energy", "discarded_energy", "bend")


@dataclass(frozen=True)
class Block:
    """What one block left in the small space.

    Attributes
    ----------
    foreseen : (n, r) coordinates of its snapshots in the basis before it
    coordinates : (n, q) the same in the basis after it
    probed : (n, p) what the probes see of them
    energies : (n,) |y|^2
    carried : (q, r) coordinates of the old basis vectors in the new basis, by column
    """

    foreseen: Array
    coordinates: Array
    probed: Array
    energies: Array
    carried: Array


def memory_needed_bytes(declaration: RunDeclaration) -> int:
    """Memory of the tall rows of a run: (R + L + 2 p) m in its dtype, and datum, scale, last snapshot and sum."""
    d = declaration
    rows = d.rank + d.length_of_block + FIRST_ROW + 3
    return d.n_rows * (rows * d.real_dtype.itemsize + 8)


class EvolvingBasis:
    """Basis of a run, with its exact mean and energies.

    Parameters
    ----------
    root_weights : (m,) square roots of the weights, or None
    """

    def __init__(self, declaration: RunDeclaration, root_weights: Array | None) -> None:
        self._declaration = declaration
        d = declaration
        self._tall = TallRows(d.n_rows, d.rank, d.length_of_block, d.real_dtype, root_weights)
        self.values: Array = np.zeros(0)
        self.probes_basis: Array = np.zeros((N_PROBES, 0))
        self.n_snapshots = self.n_blocks = 0
        self.total_energy = self.discarded_energy = self.bend = 0.0

    def put(self, position: int, snapshots: Float) -> None:
        """Write snapshots (n, m) into the open block from ``position`` on."""
        self._tall.put(position, snapshots)

    def apply(self, n: int) -> Block:
        """Take the n snapshots of the open block into the basis."""
        with one_blas_thread():
            if self.n_snapshots == 0:
                scaled = self._declaration.scaling == "unit-variance"
                self._tall.set_datum(n, len(self._declaration.fields) if scaled else None)
            rank = self._tall.rank
            straight = self.bend < STRAIGHT_BEND and self.n_blocks % STRAIGHT_BLOCKS != 0
            gram, probed = self._tall.project(n, straight)
            step = self._turn(gram, probed, n)
        energies = np.diag(gram)[rank:].copy()
        self.probes_basis = np.concatenate([self.probes_basis, probed.T], axis=1) @ step.transform.T
        self.values, self.bend = step.singular_values, step.bend
        self.total_energy += float(energies.sum())
        self.discarded_energy += step.discarded_energy
        self.n_snapshots, self.n_blocks = self.n_snapshots + n, self.n_blocks + 1
        return Block(gram[rank:, :rank].copy(), step.coordinates, probed, energies, step.carried)

    def _turn(self, gram: Array, probed: Array, n: int) -> Update:
        """Decide the update from the cheap Gram matrix, or from a second look at the rows, and turn the basis."""
        rank, dtype = self._declaration.rank, self._declaration.dtype
        step = update_from_gram(self.values, gram, rank, dtype, GRAM_CONDITION[dtype])
        if step is not None:
            self._tall.learn(step.transform, probed)
            return step
        if dtype == "float32":
            step = update_from_gram(self.values, self._tall.gram_in_double(n), rank, dtype, math.inf)
        step = step or update_from_factor(self.values, self._tall.factor(n), rank, dtype)
        self._tall.learn(step.transform, probed)
        self._tall.orthonormalise()
        return step

    def seen_covariance(self, mean_probed: Array) -> Array:
        """Return the exact covariance of w with the coordinates U y, (p, r), whatever was dropped on the way.

        ``mean_probed`` (p,) is the mean of w.
        """
        with one_blas_thread():
            sketch, total = self._tall.sketch_products()
        return sketch / self.n_snapshots - np.outer(mean_probed, total / self.n_snapshots)

    def fields(self, coefficients: Array) -> Float:
        """Return W^(-1/2) (coefficients U) as (n, n_fields, n_points), coefficients (n, r)."""
        with one_blas_thread():
            rows = self._tall.combine_basis(coefficients)
        return rows.reshape(len(rows), len(self._declaration.fields), self._declaration.n_points)

    def mean(self) -> Array:
        """Return the mean of all snapshots, (n_fields, n_points), exact whatever was truncated."""
        rows = self._tall.mean(self.n_snapshots)
        return rows.reshape(len(self._declaration.fields), self._declaration.n_points)

    def mean_energy(self) -> float:
        """Return |mean of y|^2."""
        return self._tall.mean_energy(self.n_snapshots)

    def export(self, n_open: int) -> tuple[dict[str, Any], dict[str, npt.NDArray[Any]]]:
        """Return the state: JSON-able attributes and arrays, with the n_open snapshots of the open block."""
        arrays = self._tall.export(n_open)
        arrays |= {"singular_values": self.values, "probes_basis": self.probes_basis}
        return {name: getattr(self, name) for name in _COUNTERS}, arrays

    def restore(self, attributes: dict[str, Any], arrays: dict[str, npt.NDArray[Any]]) -> None:
        """Take back what `export` gave, bit for bit."""
        for name in _COUNTERS:
            setattr(self, name, attributes[name])
        self.values, self.probes_basis = arrays["singular_values"], arrays["probes_basis"]
        self._tall.restore(arrays, has_datum=self.n_snapshots > 0)
