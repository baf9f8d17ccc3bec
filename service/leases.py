"""Which checkpoints are being read, so that none is removed under its reader."""

from __future__ import annotations

import threading
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager


class Leases:
    """Counts readers of each checkpoint; usable from any thread."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._readers: Counter[tuple[str, int]] = Counter()

    @contextmanager
    def hold(self, run_id: str, n_snapshots: int) -> Iterator[None]:
        """Keep a checkpoint in place while it is read."""
        self.take(run_id, n_snapshots)
        try:
            yield
        finally:
            self.give_back(run_id, n_snapshots)

    def take(self, run_id: str, n_snapshots: int) -> None:
        with self._lock:
            self._readers[run_id, n_snapshots] += 1

    def give_back(self, run_id: str, n_snapshots: int) -> None:
        with self._lock:
            self._readers[run_id, n_snapshots] -= 1
            if self._readers[run_id, n_snapshots] <= 0:
                del self._readers[run_id, n_snapshots]

    def held(self, run_id: str, n_snapshots: int) -> bool:
        with self._lock:
            return (run_id, n_snapshots) in self._readers
