"""Rows of the registry as frozen values, as the rest of the service sees them."""

from __future__ import annotations

import json
import sqlite3
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from streaming.declaration import RunDeclaration

Status = Literal["open", "closing", "closed", "failed"]


@lru_cache(maxsize=256)
def _parsed(text: str) -> RunDeclaration:
    return RunDeclaration.model_validate_json(text)


@dataclass(frozen=True)
class RunRecord:
    """One run: its declaration, and how far its batches reach without a gap."""

    id: str
    declaration_text: str
    created: str
    status: Status
    reason: str | None
    next_sequence: int
    next_snapshot: int

    @property
    def declaration(self) -> RunDeclaration:
        return _parsed(self.declaration_text)

    @property
    def started(self) -> bool:
        return self.next_sequence > 0


@dataclass(frozen=True)
class BatchRecord:
    """One stored batch, or what has come of it; ``first_snapshot`` is None while an earlier batch is missing.

    Asked for with a part, ``digest`` and ``n_bytes`` are those of that part.
    """

    run: str
    sequence: int
    digest: bytes
    n_snapshots: int
    n_bytes: int
    first_snapshot: int | None
    times_bytes: bytes | None
    first_time: float | None
    last_time: float | None
    idempotency_key: str | None
    missing_parts: int
    arrived: str
    pruned: bool

    @property
    def complete(self) -> bool:
        """True when all parts are there; a batch of a run without parts always is."""
        return self.missing_parts == 0

    @property
    def times(self) -> npt.NDArray[np.float64] | None:
        return None if self.times_bytes is None else np.frombuffer(self.times_bytes, "<f8").astype(np.float64)


@dataclass(frozen=True)
class PartBatch:
    """What one part has sent for one batch."""

    sequence: int
    part: int
    digest: bytes
    n_bytes: int


@dataclass(frozen=True)
class PartRecord:
    """How far one part has come: ``n_stored`` batches in all, those before ``next_sequence`` without a gap."""

    part: int
    n_stored: int
    next_sequence: int
    last_stored: str | None


@dataclass(frozen=True)
class Event:
    """Something that happened, under a number that is never used again."""

    id: int
    run: str
    kind: str
    at: str
    data: dict[str, Any]


@dataclass(frozen=True)
class CheckpointRecord:
    """A verified checkpoint on disk, named by the number of snapshots it covers."""

    n_snapshots: int
    at: str
    n_bytes: int


@dataclass(frozen=True)
class Backlog:
    """What a run holds on disk that no checkpoint covers, and what waits behind a gap."""

    n_batches: int
    n_bytes: int
    n_waiting: int


RUN_COLUMNS = "id, declaration, created, status, reason, next_sequence, next_snapshot"
BATCH_COLUMNS = (
    "run, sequence, digest, n_snapshots, n_bytes, first_snapshot, times, first_time, last_time, idempotency_key, "
    "missing_parts, arrived, pruned"
)
PART_COLUMNS = "part, n_stored, next_sequence, last_stored"


def run_from(row: tuple[Any, ...]) -> RunRecord:
    return RunRecord(*row)


def batch_from(row: tuple[Any, ...]) -> BatchRecord:
    return BatchRecord(*(*row[:-1], bool(row[-1])))


def event_from(row: tuple[Any, ...]) -> Event:
    return Event(row[0], row[1], row[2], row[3], json.loads(row[4]))


def one(cursor: sqlite3.Cursor) -> Any:
    """The single number of a query that always answers."""
    return cursor.fetchone()[0]
