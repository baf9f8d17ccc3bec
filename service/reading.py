"""Read-only views of the registry; any number of threads, none of them waits for the writer."""

from __future__ import annotations

import sqlite3
import threading
from pathlib import Path

from service.records import (
    BATCH_COLUMNS,
    PART_COLUMNS,
    RUN_COLUMNS,
    Backlog,
    BatchRecord,
    CheckpointRecord,
    Event,
    PartBatch,
    PartRecord,
    RunRecord,
    batch_from,
    event_from,
    one,
    run_from,
)
from service.registry import find_batch, find_run

ALL = -1  # as a limit in SQLite


class Reader:
    """Queries over one read-only connection for each thread."""

    def __init__(self, path: Path) -> None:
        self._uri = f"{path.absolute().as_uri()}?mode=ro"
        self._local = threading.local()
        self._lock = threading.Lock()
        self._opened: list[sqlite3.Connection] = []

    @property
    def _db(self) -> sqlite3.Connection:
        connection: sqlite3.Connection | None = getattr(self._local, "connection", None)
        if connection is None:
            # check_same_thread is off only so that `close` can end the connections of other threads.
            connection = sqlite3.connect(self._uri, uri=True, isolation_level=None, check_same_thread=False)
            self._local.connection = connection
            with self._lock:
                self._opened.append(connection)
        return connection

    def close(self) -> None:
        with self._lock:
            for connection in self._opened:
                connection.close()
            self._opened.clear()

    def run(self, run_id: str) -> RunRecord:
        """One run. Raises the 404 problem."""
        return find_run(self._db, run_id)

    def runs(self, before: str | None = None, limit: int = 1000) -> list[RunRecord]:
        """Runs, newest first; ``before`` is the id after which the last page ended."""
        rows = self._db.execute(
            f"SELECT {RUN_COLUMNS} FROM runs WHERE ?1 IS NULL OR (created, id) < "
            "(SELECT created, id FROM runs WHERE id = ?1) ORDER BY created DESC, id DESC LIMIT ?2",
            (before, limit),
        )
        return [run_from(row) for row in rows]

    def batch(self, run_id: str, sequence: int, part: int | None = None) -> BatchRecord | None:
        """One batch; with a part only when that part of it has come, and with that part's digest and size."""
        return find_batch(self._db, run_id, sequence, part)

    def part_batches(self, run_id: str, sequence: int) -> list[PartBatch]:
        """What has come of one batch, in the order of its parts; nothing in a run without parts."""
        rows = self._db.execute(
            "SELECT sequence, part, digest, n_bytes FROM part_batches WHERE run = ? AND sequence = ? ORDER BY part",
            (run_id, sequence),
        )
        return [PartBatch(*row) for row in rows]

    def part(self, run_id: str, part: int) -> PartRecord | None:
        """How far one declared part has come."""
        row = self._db.execute(
            f"SELECT {PART_COLUMNS} FROM parts WHERE run = ? AND part = ?", (run_id, part)
        ).fetchone()
        return None if row is None else PartRecord(*row)

    def slowest_parts(self, run_id: str, limit: int) -> list[PartRecord]:
        """The parts with the lowest next number, those first."""
        rows = self._db.execute(
            f"SELECT {PART_COLUMNS} FROM parts WHERE run = ? ORDER BY next_sequence, part LIMIT ?", (run_id, limit)
        )
        return [PartRecord(*row) for row in rows]

    def late_parts(self, run_id: str, next_sequence: int) -> int:
        """Parts that have not sent their share of batch ``next_sequence``."""
        return int(
            one(
                self._db.execute(
                    "SELECT count(*) FROM parts WHERE run = ? AND next_sequence <= ?", (run_id, next_sequence)
                )
            )
        )

    def waiting_since(self, run_id: str) -> str | None:
        """When the first of the batches came that now wait; None when none waits."""
        row = self._db.execute(
            "SELECT min(arrived) FROM batches WHERE run = ? AND first_snapshot IS NULL", (run_id,)
        ).fetchone()
        return None if row is None else row[0]

    def last_sequence(self, run_id: str) -> int | None:
        """The highest number of which anything is stored."""
        row = self._db.execute("SELECT max(sequence) FROM batches WHERE run = ?", (run_id,)).fetchone()
        return None if row is None else row[0]

    def batch_with_key(self, run_id: str, key: str) -> BatchRecord | None:
        row = self._db.execute(
            f"SELECT {BATCH_COLUMNS} FROM batches WHERE run = ? AND idempotency_key = ?", (run_id, key)
        ).fetchone()
        return None if row is None else batch_from(row)

    def batch_holding(self, run_id: str, snapshot: int) -> BatchRecord | None:
        """The batch in which snapshot number ``snapshot`` lies, or None when it has not come yet."""
        row = self._db.execute(
            f"SELECT {BATCH_COLUMNS} FROM batches WHERE run = ? AND first_snapshot <= ? "
            "ORDER BY first_snapshot DESC LIMIT 1",
            (run_id, snapshot),
        ).fetchone()
        found = None if row is None else batch_from(row)
        if found is None or found.first_snapshot is None:
            return None
        return found if snapshot < found.first_snapshot + found.n_snapshots else None

    def kept_batches(self, run_id: str) -> list[tuple[int, int | None]]:
        """Number, and part if there are any, of all whose bytes must still be in the journal."""
        rows = self._db.execute(
            "SELECT batches.sequence, part_batches.part FROM batches LEFT JOIN part_batches USING (run, sequence) "
            "WHERE batches.run = ? AND pruned = 0",
            (run_id,),
        )
        return [(sequence, part) for sequence, part in rows]

    def backlog(self, run_id: str) -> Backlog:
        row = self._db.execute(
            "SELECT count(*), coalesce(sum(n_bytes), 0), coalesce(sum(first_snapshot IS NULL), 0) "
            "FROM batches WHERE run = ? AND pruned = 0",
            (run_id,),
        ).fetchone()
        return Backlog(*row)

    def last_report(self, run_id: str) -> str | None:
        row = self._db.execute(
            "SELECT report FROM evaluations WHERE run = ? ORDER BY n_snapshots DESC LIMIT 1", (run_id,)
        ).fetchone()
        return None if row is None else row[0]

    def last_result_at(self, run_id: str) -> str | None:
        """When the last evaluation was made, or the run ended; None before the first."""
        row = self._db.execute(
            "SELECT max(at) FROM events WHERE run = ? AND kind IN ('evaluation', 'closed', 'failed')", (run_id,)
        ).fetchone()
        return None if row is None else row[0]

    def reports(self, run_id: str) -> list[str]:
        """All evaluations, oldest first; their number grows with the logarithm of the length of the run."""
        rows = self._db.execute("SELECT report FROM evaluations WHERE run = ? ORDER BY n_snapshots", (run_id,))
        return [row[0] for row in rows]

    def checkpoints(self, run_id: str) -> list[CheckpointRecord]:
        """Checkpoints, newest first."""
        rows = self._db.execute(
            "SELECT n_snapshots, at, n_bytes FROM checkpoints WHERE run = ? ORDER BY n_snapshots DESC", (run_id,)
        )
        return [CheckpointRecord(*row) for row in rows]

    def events(self, after: int, run_id: str | None, limit: int) -> list[Event]:
        """The next events after number ``after``, of one run or of all."""
        rows = self._db.execute(
            "SELECT id, run, kind, at, data FROM events WHERE id > ?1 AND (?2 IS NULL OR run = ?2) "
            "ORDER BY id LIMIT ?3",
            (after, run_id, limit),
        )
        return [event_from(row) for row in rows]

    def last_event(self) -> int:
        return int(one(self._db.execute("SELECT coalesce(max(id), 0) FROM events")))

    def counts(self) -> dict[str, int]:
        """Runs by status."""
        return dict(self._db.execute("SELECT status, count(*) FROM runs GROUP BY status"))
