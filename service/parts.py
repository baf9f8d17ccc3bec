"""Batches that come in parts: what has come of each, and how far each part is.

A batch is complete when all declared parts of it are there, in whatever order they came. Only then is it numbered and
applied, so that a snapshot is always whole.
"""

from __future__ import annotations

import hashlib
import sqlite3
from collections import OrderedDict
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from service.problems import Problem
from service.records import BatchRecord, PartBatch, RunRecord, one
from service.registry import now
from service.times import same_times
from streaming.declaration import Part

# Parts whose repeats are remembered; a job that was started again repeats with all its ranks, and few such run at once.
MAX_REPEATING_PARTS = 100_000


def find_declared(run: RunRecord, part: int | None) -> Part | None:
    """The declared part; None for whole snapshots. Raises the 404 and 409 problems of the wrong address."""
    parts = run.declaration.parts
    if part is None:
        if parts is not None:
            raise Problem(
                "comes-in-parts",
                f"run {run.id} was declared with {len(parts)} parts; send each to "
                f"/v1/runs/{run.id}/parts/{{part}}/batches/{{sequence}}",
                n_parts=len(parts),
            )
        return None
    if parts is None:
        raise Problem(
            "comes-whole",
            f"run {run.id} was declared without parts; send whole snapshots to /v1/runs/{run.id}/batches/{{sequence}}",
        )
    if part >= len(parts):
        raise Problem("unknown-part", f"run {run.id} has parts 0 to {len(parts) - 1}, there is no part {part}")
    return parts[part]


def check_agrees(begun: BatchRecord, n_snapshots: int, times: npt.NDArray[np.float64] | None) -> None:
    """Raise the 409 problem unless a part fits those of its batch that came before it."""
    if n_snapshots != begun.n_snapshots:
        raise Problem(
            "parts-disagree",
            f"this part of batch {begun.sequence} holds {n_snapshots} snapshots, the parts stored before it hold "
            f"{begun.n_snapshots}; all parts must cut their snapshots into the same batches",
            sequence=begun.sequence,
            n_snapshots=begun.n_snapshots,
        )
    if not same_times(begun.times, times):
        theirs = "none" if begun.first_time is None else f"{begun.first_time!r} to {begun.last_time!r}"
        own = "none" if times is None else f"{float(times[0])!r} to {float(times[-1])!r}"
        raise Problem(
            "parts-disagree",
            f"this part of batch {begun.sequence} has the times {own}, the parts stored before it have {theirs}; all "
            "parts of a batch must have the same times",
            sequence=begun.sequence,
        )


def add_part(db: sqlite3.Connection, came: PartBatch, run_id: str) -> None:
    """Enter what one part has sent; the last one to come gives the batch its digest."""
    key = (run_id, came.sequence)
    db.execute(
        "INSERT INTO part_batches (run, sequence, part, digest, n_bytes) VALUES (?, ?, ?, ?, ?)",
        (*key, came.part, came.digest, came.n_bytes),
    )
    db.execute(
        "UPDATE batches SET missing_parts = missing_parts - 1, n_bytes = n_bytes + ? WHERE run = ? AND sequence = ?",
        (came.n_bytes, *key),
    )
    if one(db.execute("SELECT missing_parts FROM batches WHERE run = ? AND sequence = ?", key)) == 0:
        digests = db.execute("SELECT digest FROM part_batches WHERE run = ? AND sequence = ? ORDER BY part", key)
        whole = hashlib.sha256(b"".join(digest for (digest,) in digests)).digest()
        db.execute("UPDATE batches SET digest = ? WHERE run = ? AND sequence = ?", (whole, *key))
    _advance(db, came, run_id)


def _advance(db: sqlite3.Connection, came: PartBatch, run_id: str) -> None:
    """Count what came for its part, and move on over what the part had sent ahead."""
    following = one(db.execute("SELECT next_sequence FROM parts WHERE run = ? AND part = ?", (run_id, came.part)))
    while db.execute(
        "SELECT 1 FROM part_batches WHERE run = ? AND sequence = ? AND part = ?", (run_id, following, came.part)
    ).fetchone():
        following += 1
    db.execute(
        "UPDATE parts SET n_stored = n_stored + 1, next_sequence = ?, last_stored = ? WHERE run = ? AND part = ?",
        (following, now(), run_id, came.part),
    )


@dataclass(frozen=True)
class Repeats:
    """How often a part has sent what was stored before, and when it last did; a rank that was started again does."""

    n: int = 0
    last: str | None = None


class RepeatNotes:
    """Repeats of each part since the start of the service; noted on the event loop alone."""

    def __init__(self) -> None:
        self._notes: OrderedDict[tuple[str, int], Repeats] = OrderedDict()

    def get(self, run_id: str, part: int) -> Repeats:
        return self._notes.get((run_id, part), Repeats())

    def note(self, run_id: str, part: int) -> None:
        """Count one more."""
        before = self._notes.pop((run_id, part), Repeats())
        self._notes[run_id, part] = replace(before, n=before.n + 1, last=now())
        if len(self._notes) > MAX_REPEATING_PARTS:
            self._notes.popitem(last=False)
