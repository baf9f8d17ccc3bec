"""The record of temporal coefficients: kept as they were taken, with the small rotations of the basis since.

The file grows by one entry of fixed size per block and nothing in it is rewritten, so that the cost per snapshot does
not grow with the length of the record. Reading multiplies the rotations backwards once.
"""

from __future__ import annotations

import os
import tempfile
import weakref
from pathlib import Path

import numpy as np
import numpy.typing as npt

from streaming.novelty import COLUMNS

Array = npt.NDArray[np.float64]


class CoefficientRecord:
    """Append-only file of coefficients; one entry for each block.

    An entry holds n and q, then in float64 times (L,), c (L, R), the rotation (R, R) and novelty (L, 4).

    Parameters
    ----------
    max_rank, block_length : R and L, the size of an entry
    path : file to keep the record in, emptied first; None for a temporary file that ends with the process
    """

    def __init__(self, max_rank: int, block_length: int, path: Path | None) -> None:
        self._max_rank, self._block_length = max_rank, block_length
        self._entry = np.dtype(
            [
                ("sizes", "<i8", (2,)),
                ("times", "<f8", (block_length,)),
                ("coordinates", "<f8", (block_length, max_rank)),
                ("carried", "<f8", (max_rank, max_rank)),
                ("novelty", "<f8", (block_length, len(COLUMNS))),
            ]
        )
        self._file = tempfile.TemporaryFile() if path is None else path.open("w+b")  # noqa: SIM115 - kept open
        self.close = weakref.finalize(self, self._file.close)
        self.n_entries = 0

    def append(self, times: Array, coordinates: Array, carried: Array, novelty: Array) -> None:
        """Add a block: times (n,), c (n, q) in the basis after it, carried (q, r) into that basis, novelty (n, 4)."""
        entry = np.zeros((), self._entry)
        n, q = coordinates.shape
        entry["sizes"] = (n, q)
        entry["times"][:n] = times
        entry["coordinates"][:n, :q] = coordinates
        entry["carried"][:q, : carried.shape[1]] = carried
        entry["novelty"][:n] = novelty
        self._file.seek(self.n_entries * self._entry.itemsize)
        self._file.write(entry.tobytes())
        self.n_entries += 1

    def sync(self) -> None:
        """Bring the file to the disk."""
        self._file.flush()
        os.fsync(self._file.fileno())

    def read(self, at_least: int | None = None) -> tuple[Array, Array]:
        """Return times (N,) and coefficients (N, R) in the current basis, padded with zeros beyond its rank.

        With ``at_least`` the oldest blocks beyond so many snapshots are left out.
        """
        turn = np.eye(self._max_rank)
        times: list[Array] = []
        parts: list[Array] = []
        for k in reversed(range(self.n_entries)):
            entry = self._read_entry(k)
            n = int(entry["sizes"][0])
            times.append(entry["times"][:n])
            parts.append(entry["coordinates"][:n] @ turn.T)
            turn = turn @ entry["carried"]
            if at_least is not None and sum(map(len, times)) >= at_least:
                break
        if not times:
            return np.zeros(0), np.zeros((0, 0))
        return np.concatenate(times[::-1]), np.concatenate(parts[::-1])

    def read_novelty(self) -> tuple[Array, Array]:
        """Return times (N,) and novelty (N, 4) of the whole record."""
        entries = [self._read_entry(k) for k in range(self.n_entries)]
        sizes = [int(entry["sizes"][0]) for entry in entries]
        times = [entry["times"][:n] for entry, n in zip(entries, sizes, strict=True)]
        rows = [entry["novelty"][:n] for entry, n in zip(entries, sizes, strict=True)]
        return np.concatenate([np.zeros(0), *times]), np.concatenate([np.zeros((0, len(COLUMNS))), *rows])

    def _read_entry(self, k: int) -> npt.NDArray[np.void]:
        self._file.flush()
        raw = os.pread(self._file.fileno(), self._entry.itemsize, k * self._entry.itemsize)
        entry: npt.NDArray[np.void] = np.frombuffer(raw, self._entry)[0]
        return entry

    def fill(self, times: Array, coordinates: Array, novelty: Array) -> None:
        """Start over from a record (N,), (N, q) and (N, 4) that is already in the current basis."""
        self.n_entries = 0
        self._file.truncate(0)
        for start in range(0, len(times), self._block_length):
            part = slice(start, start + self._block_length)
            self.append(times[part], coordinates[part], np.eye(coordinates.shape[1]), novelty[part])
