"""The tall rows: the one object that holds arrays as long as a snapshot, and the only one that is mutable and big.

Rows are cut into panels, (rows, width), each contiguous and small enough for the cache. A panel holds the sketch and
the p probes first, then the r basis rows and the snapshots of the open block, so that one product gives every inner
product of the new snapshots that an update needs. The sketch, p rows, is the sum of w y' over all snapshots: the
exact covariance as the probes see it, whatever the basis has dropped.
Panels are worked on side by side, each by one BLAS thread, and their small results are summed
in panel order: results do not depend on the number of threads, bit for bit.

This is the seam for slabs of rows elsewhere: whoever offers the public methods below can stand in for it.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import cache
from typing import TypeVar

import numpy as np
import numpy.typing as npt
from scipy.linalg import qr, solve_triangular
from threadpoolctl import ThreadpoolController

from streaming.probes import N_PROBES, rademacher
from streaming.threads import threads

Float = npt.NDArray[np.floating]
Array = npt.NDArray[np.float64]
Result = TypeVar("Result")

PANEL_BYTES = 4 * 1024**2  # of one panel; measured best on machines with 1 MiB of second-level cache per core
FIRST_ROW = 2 * N_PROBES  # of the basis in a panel; the sketch and the probes come before
ORTHONORMAL_EPS = 50.0  # after an ill-conditioned update the basis is made orthonormal beyond this many eps


@cache
def _blas() -> ThreadpoolController:
    return ThreadpoolController()


@contextmanager
def one_blas_thread() -> Iterator[None]:
    """Run the body with single-threaded BLAS, so that its results are the same on every machine setting."""
    with _blas().limit(limits=1, user_api="blas"):
        yield


class TallRows:
    """Basis, open block, probes, datum and running sum of a run, cut into panels of rows.

    Parameters
    ----------
    root_weights : (m,) square roots of the weights, or None for all ones
    max_rank, block_length : R and L
    dtype : dtype of the rows
    """

    def __init__(
        self, n_rows: int, max_rank: int, block_length: int, dtype: npt.DTypeLike, root_weights: Array | None
    ) -> None:
        self.n_rows, self.dtype = n_rows, np.dtype(dtype)
        self.rank = 0
        self._has_datum = False
        self._rooms = threading.local()
        self._plain: bool | None = None  # all scales are one; not known yet
        capacity = FIRST_ROW + max_rank + block_length
        width = max(256, PANEL_BYTES // (capacity * self.dtype.itemsize))
        self._n_panels = -(-n_rows // width)
        self._width = -(-n_rows // self._n_panels)
        shape = (self._n_panels, self._width)
        self._panels = np.zeros((self._n_panels, capacity, self._width), self.dtype)
        self._panels[:, N_PROBES:FIRST_ROW] = self._to_panels(rademacher(n_rows, self.dtype))
        self._datum = np.zeros(shape, self.dtype)
        self._scale = self._to_panels(np.ones(n_rows) if root_weights is None else root_weights).astype(dtype)
        self._sum = np.zeros(shape)

    # -- rows in and out ------------------------------------------------------------------------------

    def put(self, position: int, snapshots: Float) -> None:
        """Write snapshots (n, m) into the open block from ``position`` on, as y = W^(1/2) (x - datum).

        Before the datum is known they are kept as they came.
        """

        self._plain = self._plain if self._plain is not None else bool((self._from_panels(self._scale) == 1).all())

        def write(k: int) -> None:
            part = snapshots[:, self._columns(k)]
            first = FIRST_ROW + self.rank + position
            rows = self._panels[k, first : first + len(part), : part.shape[1]]
            if self._has_datum:
                np.subtract(part, self._datum[k, : part.shape[1]], out=rows, casting="same_kind")
                if not self._plain:
                    rows *= self._scale[k, : part.shape[1]]
            else:
                rows[...] = part

        self._each(write)

    def set_datum(self, n_snapshots: int, unit_variance_fields: int | None) -> None:
        """Make the mean of the open block the datum, and bring the block to y.

        With ``unit_variance_fields`` each of that many equal runs of rows is scaled by the inverse of its
        weighted standard deviation in this block; a field that does not vary keeps scale 1.
        """

        def centre(k: int) -> Array:
            rows = self._rows(k, n_snapshots)
            self._datum[k] = rows.mean(axis=0, dtype=np.float64)
            rows -= self._datum[k]
            rows *= self._scale[k]
            squares: Array = np.einsum("ij,ij->j", rows, rows, dtype=np.float64)
            return squares

        squares = np.concatenate(self._each(centre))[: self.n_rows]
        self._has_datum = True
        if unit_variance_fields is not None:
            self._scale_fields(squares / n_snapshots, n_snapshots, unit_variance_fields)

    def _scale_fields(self, variance: Array, n_snapshots: int, n_fields: int) -> None:
        weights = self.root_weights().astype(np.float64).reshape(n_fields, -1) ** 2
        field_variance = variance.reshape(n_fields, -1).sum(axis=1) / weights.sum(axis=1)
        factor = np.where(field_variance > 0, 1.0 / np.sqrt(np.where(field_variance > 0, field_variance, 1.0)), 1.0)
        factors = self._to_panels(np.repeat(factor, self.n_rows // n_fields)).astype(self.dtype)
        self._scale *= factors
        self._plain = None
        self._each(lambda k: np.multiply(self._rows(k, n_snapshots), factors[k], out=self._rows(k, n_snapshots)))

    # -- products ---------------------------------------------------------------------------------------

    def project(self, n_snapshots: int, straight: bool = False) -> tuple[Array, Array]:
        """Return the Gram matrix of [U; Y], (r + n, r + n), and the probes of the snapshots, (n, p).

        Products in the dtype of the rows within a panel, sums over panels in float64. With ``straight`` the basis
        is taken to be orthonormal, which saves its own products.
        """
        r = self.rank

        def products(k: int) -> tuple[Float, Float | None]:
            basis, new = self._rows(k, r), self._panels[k, FIRST_ROW + r : FIRST_ROW + r + n_snapshots]
            cross = self._panels[k, N_PROBES : FIRST_ROW + r + n_snapshots] @ new.T
            return cross, None if straight else basis @ basis.T

        gram = np.zeros((r + n_snapshots, r + n_snapshots))
        if straight:
            gram[:r, :r] = np.eye(r)
        seen = np.zeros((n_snapshots, N_PROBES))
        for cross, inner in self._each(products):
            seen += cross[:N_PROBES].T
            gram[r:] += cross[N_PROBES:].T
            if inner is not None:
                gram[:r, :r] += inner
        gram[:r, r:] = gram[r:, :r].T
        gram[r:, r:] = (gram[r:, r:] + gram[r:, r:].T) / 2
        return gram, seen

    def gram_in_double(self, n_snapshots: int) -> Array:
        """Return the Gram matrix of [U; Y] with every product in float64; for rows kept in float32."""
        n_all = self.rank + n_snapshots

        def product(k: int) -> Array:
            rows = self._rows(k, n_all).astype(np.float64)
            out: Array = rows @ rows.T
            return out

        gram = np.zeros((n_all, n_all))
        for part in self._each(product):
            gram += part
        return gram

    def factor(self, n_snapshots: int) -> Array:
        """Return a triangular C, (K, K), with C C' = [U; Y][U; Y]', by QR of the panels and then of their factors.

        References
        ----------
        Demmel, Grigori, Hoemmen & Langou (2012), SIAM J. Sci. Comput. 34, A206 (from memory).
        """
        n_all = self.rank + n_snapshots
        stacked = self._each(lambda k: _triangle(self._rows(k, n_all).T.astype(np.float64), n_all))
        while len(stacked) > 1:
            pairs = [np.concatenate(stacked[i : i + 2]) for i in range(0, len(stacked), 2)]
            stacked = [_triangle(pair, n_all) for pair in pairs]
        return stacked[0].T

    def learn(self, transform: Array, probed: Array) -> None:
        """Take the open block in: into the basis, transform [U; Y], (q, K), the sketch and the running sum.

        ``probed`` (n, p) is what the probes saw of the block. One product does all three.
        """
        rank, n_all = transform.shape
        stacked = np.zeros((rank + N_PROBES + 1, n_all), self.dtype)
        stacked[:rank] = transform
        stacked[rank:-1, self.rank :] = probed.T
        stacked[-1, self.rank :] = 1.0

        def apply(k: int) -> None:
            product = np.matmul(stacked, self._rows(k, n_all), out=self._scratch(len(stacked)))
            self._rows(k, rank)[...] = product[:rank]
            self._panels[k, :N_PROBES] += product[rank:-1]
            self._sum[k] += product[-1]

        self._each(apply)
        self.rank = rank

    def rotate(self, transform: Array) -> None:
        """Replace the basis by transform U, (q, r), in place."""
        small = transform.astype(self.dtype)
        rank, n_all = small.shape

        def apply(k: int) -> None:
            self._rows(k, rank)[...] = small @ self._rows(k, n_all)

        self._each(apply)
        self.rank = rank

    def orthonormalise(self) -> None:
        """Make the basis rows orthonormal again, leading rows changed least (Cholesky QR of the basis alone)."""
        gram = self.gram_in_double(0)
        r = self.rank
        if np.abs(gram - np.eye(r)).max(initial=0.0) > ORTHONORMAL_EPS * float(np.finfo(self.dtype).eps):
            self.rotate(solve_triangular(np.linalg.cholesky(gram), np.eye(r), lower=True))

    def sketch_products(self) -> tuple[Array, Array]:
        """Return the sketch in basis coordinates, (p, r): sum of w (U y)'; and U times the running sum, (r,)."""

        def product(k: int) -> tuple[Float, Array]:
            basis = self._rows(k, self.rank)
            return self._panels[k, :N_PROBES] @ basis.T, basis @ self._sum[k]

        sketch, total = np.zeros((N_PROBES, self.rank)), np.zeros(self.rank)
        for part, sums in self._each(product):
            sketch += part
            total += sums
        return sketch, total

    # -- reading ------------------------------------------------------------------------------------------

    def combine_basis(self, coefficients: Array) -> Float:
        """Return W^(-1/2) (coefficients U), (n, m), coefficients (n, r): physical fields, without the datum."""
        out = np.empty((len(coefficients), self.n_rows), self.dtype)
        small = coefficients.astype(self.dtype)

        def fill(k: int) -> None:
            span = self._columns(k)
            width = span.stop - span.start
            out[:, span] = (small @ self._rows(k, self.rank)[:, :width]) / self._scale[k, :width]

        self._each(fill)
        return out

    def mean(self, n_snapshots: int) -> Array:
        """Return the mean of all snapshots in the basis so far, (m,), float64, physical."""
        scale = self._from_panels(self._scale).astype(np.float64)
        return self._from_panels(self._datum) + self._from_panels(self._sum) / (n_snapshots * scale)

    def mean_energy(self, n_snapshots: int) -> float:
        """Return |mean of y|^2."""
        return float(np.einsum("kj,kj->", self._sum, self._sum)) / n_snapshots**2

    def root_weights(self) -> Float:
        """Return W^(1/2) with the field scales, (m,)."""
        return self._from_panels(self._scale)

    # -- state ------------------------------------------------------------------------------------------

    def export(self, n_open: int) -> dict[str, Float]:
        """Return the state of the rows: basis (r, m), waiting (n_open, m), sketch (p, m), datum, sum and scale (m,)."""
        used = self._panels[:, FIRST_ROW : FIRST_ROW + self.rank + n_open].transpose(1, 0, 2)
        sketch = self._panels[:, :N_PROBES].transpose(1, 0, 2).reshape(N_PROBES, self._n_panels * self._width)
        rows = used.reshape(used.shape[0], self._n_panels * self._width)[:, : self.n_rows]
        return {
            "basis": rows[: self.rank],
            "waiting": rows[self.rank :],
            "sketch": sketch[:, : self.n_rows],
            "datum": self._from_panels(self._datum),
            "sum": self._from_panels(self._sum),
            "scale": self._from_panels(self._scale),
        }

    def restore(self, state: dict[str, Float], has_datum: bool) -> None:
        """Take back what `export` gave, bit for bit."""
        self.rank = len(state["basis"])
        rows = np.concatenate([state["basis"], state["waiting"]])
        self._panels[:, FIRST_ROW : FIRST_ROW + len(rows)] = self._to_panels(rows)
        self._panels[:, :N_PROBES] = self._to_panels(state["sketch"])
        self._datum[...], self._sum[...] = self._to_panels(state["datum"]), self._to_panels(state["sum"])
        self._scale = self._to_panels(state["scale"])
        self._plain = None
        self._has_datum = has_datum

    def _scratch(self, n: int) -> Float:
        """Room for n rows of a panel, kept for each thread: fresh memory for each panel costs page faults."""
        room: Float | None = getattr(self._rooms, "rows", None)
        if room is None or len(room) < n:
            room = self._rooms.rows = np.empty((n, self._width), self.dtype)
        return room[:n]

    # -- panels -----------------------------------------------------------------------------------------

    def _rows(self, panel: int, n: int) -> Float:
        """The first n rows of [U; Y] in a panel, a view (n, width)."""
        return self._panels[panel, FIRST_ROW : FIRST_ROW + n]

    def _columns(self, panel: int) -> slice:
        start = panel * self._width
        return slice(start, min(start + self._width, self.n_rows))

    def _each(self, work: Callable[[int], Result]) -> list[Result]:
        if self._n_panels == 1:
            return [work(0)]
        return list(threads().map(work, range(self._n_panels)))

    def _to_panels(self, rows: Float) -> Float:
        """(m,) to (n_panels, width), or (q, m) to (n_panels, q, width); the last panel is padded with zeros."""
        flat = np.atleast_2d(rows)
        out = np.zeros((self._n_panels, len(flat), self._width), rows.dtype)
        for k in range(self._n_panels):
            part = flat[:, self._columns(k)]
            out[k, :, : part.shape[1]] = part
        return out[:, 0] if rows.ndim == 1 else out

    def _from_panels(self, panels: Float) -> Float:
        return panels.reshape(-1)[: self.n_rows].copy()


def _triangle(rows: Array, size: int) -> Array:
    """Upper triangle R, (size, size), of the QR of rows (any, size); padded when there are fewer rows."""
    (upper,) = qr(rows, mode="r", overwrite_a=True, check_finite=False)
    out = np.zeros((size, size))
    out[: min(len(upper), size)] = upper[:size]
    return out
