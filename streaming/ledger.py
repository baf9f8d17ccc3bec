"""The ledger: a bounded list of block moments from which everything statistical is computed.

Entries cover equal, consecutive spans of snapshots. When `MAX_ENTRIES` are complete, neighbours are joined and the
span doubles, so the ledger costs O(64 (R + p)^2) for ever. When the basis turns or is cut, the c part of every entry
turns and is cut with it; what the probes saw never changes.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from streaming.moments import Moments

Array = npt.NDArray[np.float64]

MAX_ENTRIES = 64
ENTRIES_PER_BLOCK = 8  # at the start, so that the first few blocks already show the spread over time


def first_span(block_length: int) -> int:
    """Largest divisor of the block length that gives at least `ENTRIES_PER_BLOCK` entries per block."""
    limit = max(1, block_length // ENTRIES_PER_BLOCK)
    return max(s for s in range(1, limit + 1) if block_length % s == 0)


class Ledger:
    """Sums of z = (c; w) over spans of snapshots, in the current basis.

    Parameters
    ----------
    max_rank : R, room for the coordinates; unused ones are zero
    n_probes : p
    span : snapshots per entry at the start
    """

    def __init__(self, max_rank: int, n_probes: int, span: int) -> None:
        self.span = span
        self._rank, self._max_rank = 0, max_rank
        size = max_rank + n_probes
        room = MAX_ENTRIES + 1  # one more for the open entry
        self._counts = np.zeros(room)
        self._means = np.zeros((room, size))
        self._scatters = np.zeros((room, size, size))
        self._energies = np.zeros(room)
        self._times = np.zeros((room, 2))
        self._last = 0  # index of the open entry

    def carry(self, carried: Array) -> None:
        """Bring the c part of every entry to a new basis; ``carried`` (q, r) maps old coordinates to new ones."""
        r, q, top = self._rank, len(carried), self._max_rank
        used = slice(0, self._last + 1)
        turned = self._means[used, :r] @ carried.T
        cross = carried @ self._scatters[used, :r, top:]
        inner = carried @ self._scatters[used, :r, :r] @ carried.T
        for array in (self._means[used, :top], self._scatters[used, :top], self._scatters[used, :, :top]):
            array[...] = 0.0
        self._means[used, :q] = turned
        self._scatters[used, :q, top:] = cross
        self._scatters[used, top:, :q] = cross.transpose(0, 2, 1)
        self._scatters[used, :q, :q] = inner
        self._rank = q

    def add(self, coordinates: Array, probed: Array, energies: Array, times: Array) -> None:
        """Add snapshots in time order: c (n, q) in the current basis, w (n, p), |y|^2 (n,), times (n,)."""
        padding = np.zeros((len(coordinates), self._max_rank - coordinates.shape[1]))
        z = np.concatenate([coordinates, padding, probed], axis=1)
        start = 0
        while start < len(z):
            stop = min(len(z), start + self.span - int(self._counts[self._last]))
            self._extend(z[start:stop], float(energies[start:stop].sum()), times[start:stop])
            start = stop

    def _extend(self, z: Array, energy: float, times: Array) -> None:
        k, n_old, n_new = self._last, self._counts[self._last], len(z)
        mean = z.mean(axis=0)
        centred = z - mean
        offset = mean - self._means[k]
        self._scatters[k] += centred.T @ centred + (n_old * n_new / (n_old + n_new)) * np.outer(offset, offset)
        self._means[k] += offset * (n_new / (n_old + n_new))
        self._counts[k] += n_new
        self._energies[k] += energy
        self._times[k] = (times[0] if n_old == 0 else self._times[k, 0], times[-1])
        if self._counts[k] == self.span:
            self._last += 1
            if self._last == MAX_ENTRIES:
                self._join()

    def _join(self) -> None:
        joined = self._slice(MAX_ENTRIES).joined(2)
        half = joined.n_blocks
        for name in ("counts", "means", "scatters", "energies", "times"):
            own = getattr(self, f"_{name}")
            own[:half] = getattr(joined, name)
            own[half:] = 0.0
        self._last, self.span = half, 2 * self.span

    def _slice(self, n: int) -> Moments:
        return Moments(
            self._counts[:n].copy(),
            self._means[:n].copy(),
            self._scatters[:n].copy(),
            self._energies[:n].copy(),
            self._times[:n].copy(),
            self._max_rank,
            np.zeros((self._means.shape[1] - self._max_rank, self._max_rank)),
            0.0,
        )

    def moments(self, probes_basis: Array, mean_energy: float) -> Moments:
        """Return an immutable copy, cut to the current rank; a last entry that is not full comes along, shorter.

        Parameters
        ----------
        probes_basis : (p, r) Omega U'
        mean_energy : |mean of y|^2 over the record
        """
        n = self._last + (1 if self._counts[self._last] > 0 else 0)
        keep = np.r_[0 : self._rank, self._max_rank : self._means.shape[1]]
        return Moments(
            self._counts[:n].copy(),
            self._means[:n][:, keep],
            self._scatters[:n][:, keep[:, None], keep],
            self._energies[:n].copy(),
            self._times[:n].copy(),
            self._rank,
            probes_basis.copy(),
            mean_energy,
        )

    def export(self) -> dict[str, Array]:
        """Return the whole state as arrays."""
        return {
            "counts": self._counts,
            "means": self._means,
            "scatters": self._scatters,
            "energies": self._energies,
            "times": self._times,
            "sizes": np.array([self._rank, self._last, self.span], dtype=np.float64),
        }

    def restore(self, state: dict[str, Array]) -> None:
        """Take back what `export` gave, bit for bit."""
        for name in ("counts", "means", "scatters", "energies", "times"):
            getattr(self, f"_{name}")[...] = state[name]
        self._rank, self._last, self.span = (int(v) for v in state["sizes"])
