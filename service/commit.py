"""The step that makes a batch count: its file under its name, then its row, in one transaction.

All commits run on one thread, so that what is decided here holds until it is written.
"""

from __future__ import annotations

import sqlite3
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.durable import storage_problem
from service.folders import RunFolder
from service.journal import Draft
from service.parts import add_part, check_agrees
from service.problems import Problem
from service.records import BATCH_COLUMNS, BatchRecord, PartBatch, RunRecord, batch_from, one
from service.registry import Registry, add_event, find_batch, find_run, now
from service.times import check_neighbours, same_times

BUSY_SECONDS = 2


@dataclass(frozen=True)
class Offer:
    """A whole, checked body and what its request said about it.

    ``sequence`` None takes the next number; ``part`` None is a batch of whole snapshots.
    """

    run_id: str
    sequence: int | None
    key: str | None
    digest: bytes
    n_snapshots: int
    n_bytes: int
    times: npt.NDArray[np.float64] | None
    part: int | None = None

    @property
    def times_bytes(self) -> bytes | None:
        return None if self.times is None else self.times.astype("<f8").tobytes()


def repeat_of(existing: BatchRecord | None, offer: Offer) -> BatchRecord | None:
    """The stored batch when the offer repeats it, None when it is new. Raises the 409 and 422 problems."""
    if existing is None:
        return None
    equal_times = existing.times_bytes == offer.times_bytes
    if offer.part is not None:  # its times may be those of another part, which differ by rounding
        equal_times = same_times(existing.times, offer.times)
    if existing.digest == offer.digest and equal_times:
        return existing
    differs = "other bytes" if existing.digest != offer.digest else "other times"
    if offer.sequence is None:
        raise Problem(
            "key-reused",
            f"Idempotency-Key {offer.key!r} came before, with {differs}, for batch {existing.sequence}; use a new "
            "key for new data",
            sequence=existing.sequence,
        )
    what = f"batch {offer.sequence}" if offer.part is None else f"part {offer.part} of batch {offer.sequence}"
    raise Problem(
        "sequence-conflict",
        f"{what} is stored with {differs} (sha-256 {existing.digest.hex()}); a stored batch is "
        "never replaced: send new data under the run's next_sequence",
        sequence=offer.sequence,
        stored_sha256=existing.digest.hex(),
    )


def check_open(run: RunRecord) -> None:
    """Raise the 409 problem unless the run takes batches."""
    if run.status in ("closing", "closed"):
        raise Problem("run-closed", f"run {run.id} is closed and takes no more snapshots; declare a new run")
    if run.status == "failed":
        raise Problem("run-failed", f"run {run.id} has failed: {run.reason}; declare a new run")


def commit_batch(
    registry: Registry, folder: RunFolder, draft: Draft, offer: Offer, max_waiting: int
) -> tuple[BatchRecord, bool]:
    """Store the batch, or recognise it. Returns its record, and whether it is a repeat."""
    kept = None
    try:
        with registry.transaction() as db:
            run = find_run(db, offer.run_id)
            existing = repeat_of(_existing(db, offer), offer)
            if existing is not None:
                return existing, True
            check_open(run)
            sequence = _place(db, run, offer, max_waiting)
            begun = find_batch(db, run.id, sequence)  # by another part
            if begun is None:
                _check_times(db, offer, sequence)
            else:
                check_agrees(begun, offer.n_snapshots, offer.times)
            kept = folder.batch(sequence, offer.part)
            draft.keep(kept)
            record = _insert(db, run, offer, sequence, begun)
        return record, False
    except OSError as error:
        raise storage_problem(error) from error
    except Problem as problem:
        if kept is not None and problem.kind == "disk-full":
            kept.unlink(missing_ok=True)  # the row was rolled back, so nothing was promised
        raise


def _existing(db: sqlite3.Connection, offer: Offer) -> BatchRecord | None:
    if offer.sequence is not None:
        return find_batch(db, offer.run_id, offer.sequence, offer.part)
    if offer.key is None:
        return None
    row = db.execute(
        f"SELECT {BATCH_COLUMNS} FROM batches WHERE run = ? AND idempotency_key = ?", (offer.run_id, offer.key)
    ).fetchone()
    return None if row is None else batch_from(row)


def _place(db: sqlite3.Connection, run: RunRecord, offer: Offer, max_waiting: int) -> int:
    """The sequence number of the offer. Raises the 429 problem when too many wait behind a gap."""
    if offer.sequence is None:
        highest = one(db.execute("SELECT max(sequence) FROM batches WHERE run = ?", (run.id,)))
        sequence = 0 if highest is None else int(highest) + 1
    else:
        sequence = offer.sequence
    if sequence > run.next_sequence and find_batch(db, run.id, sequence) is None:
        waiting = one(
            db.execute("SELECT count(*) FROM batches WHERE run = ? AND sequence > ?", (run.id, run.next_sequence))
        )
        if waiting >= max_waiting:
            raise Problem(
                "busy",
                f"{waiting} batches wait for batch {run.next_sequence}, which is missing; send that one first",
                retry_after_seconds=BUSY_SECONDS,
                next_sequence=run.next_sequence,
            )
    return sequence


def _check_times(db: sqlite3.Connection, offer: Offer, sequence: int) -> None:
    """Times increase from batch to batch, and a run gives them always or never."""
    before = db.execute(
        "SELECT last_time FROM batches WHERE run = ? AND sequence < ? ORDER BY sequence DESC LIMIT 1",
        (offer.run_id, sequence),
    ).fetchone()
    after = db.execute(
        "SELECT first_time FROM batches WHERE run = ? AND sequence > ? ORDER BY sequence LIMIT 1",
        (offer.run_id, sequence),
    ).fetchone()
    for neighbour in (before, after):
        if neighbour is not None and (neighbour[0] is None) != (offer.times is None):
            raise Problem(
                "wrong-times",
                f"batch {sequence} comes {'without' if offer.times is None else 'with'} times, the stored batch "
                "beside it does not match; give times with every batch of a run, or with none",
            )
    if offer.times is not None:
        check_neighbours(float(offer.times[0]), float(offer.times[-1]), before and before[0], after and after[0])


def _insert(
    db: sqlite3.Connection, run: RunRecord, offer: Offer, sequence: int, begun: BatchRecord | None
) -> BatchRecord:
    if begun is None:
        _insert_batch(db, run, offer, sequence)
    if offer.part is not None:
        add_part(db, PartBatch(sequence, offer.part, offer.digest, offer.n_bytes), run.id)
    elif sequence != run.next_sequence:
        add_event(db, run.id, "gap", {"missing": run.next_sequence, "stored": sequence})
    if sequence == run.next_sequence:
        _number_snapshots(db, run)
    record = find_batch(db, run.id, sequence)
    assert record is not None
    return record


def _insert_batch(db: sqlite3.Connection, run: RunRecord, offer: Offer, sequence: int) -> None:
    """The row of a batch; in a run that comes in parts an empty one, to which `add_part` adds."""
    first, last = (None, None) if offer.times is None else (float(offer.times[0]), float(offer.times[-1]))
    n_parts = len(run.declaration.parts or ())
    db.execute(
        f"INSERT INTO batches ({BATCH_COLUMNS}) VALUES (?, ?, ?, ?, ?, NULL, ?, ?, ?, ?, ?, ?, 0)",
        (
            run.id,
            sequence,
            b"" if n_parts else offer.digest,
            offer.n_snapshots,
            0 if n_parts else offer.n_bytes,
            offer.times_bytes,
            first,
            last,
            offer.key,
            n_parts,
            now(),
        ),
    )


def _number_snapshots(db: sqlite3.Connection, run: RunRecord) -> None:
    """Give snapshot numbers to the batch that just came, if it is complete, and to those that waited for it."""
    sequence, snapshot = run.next_sequence, run.next_snapshot
    rows = db.execute(
        "SELECT sequence, n_snapshots, missing_parts FROM batches WHERE run = ? AND sequence >= ? ORDER BY sequence",
        (run.id, sequence),
    )
    numbered: list[tuple[int, str, int]] = []
    for stored, n_snapshots, missing_parts in rows:
        if stored != sequence or missing_parts:
            break
        numbered.append((snapshot, run.id, sequence))
        sequence, snapshot = sequence + 1, snapshot + n_snapshots
    db.executemany("UPDATE batches SET first_snapshot = ? WHERE run = ? AND sequence = ?", numbered)
    db.execute("UPDATE runs SET next_sequence = ?, next_snapshot = ? WHERE id = ?", (sequence, snapshot, run.id))
