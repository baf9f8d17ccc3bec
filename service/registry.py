"""The one writer of the registry: every fact that must survive is committed here, in SQLite.

One connection writes, behind a lock, and it alone checkpoints the WAL; `service.reading` opens read-only
connections. synchronous=FULL makes each commit durable when it returns. Transactions start with BEGIN
IMMEDIATE, since a deferred one that turns into a write may fail at once however long the timeout.
"""

from __future__ import annotations

import json
import sqlite3
import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from service.durable import RETRY_STORAGE_SECONDS, Poison
from service.problems import Problem
from service.records import BATCH_COLUMNS, RUN_COLUMNS, BatchRecord, RunRecord, batch_from, one, run_from
from service.schema import SCHEMA_VERSION, TABLES

# Events of runs that are kept number some hundreds each; those of deleted runs must not add up for ever.
MAX_EVENTS = 1_000_000


class RegistryError(RuntimeError):
    """The registry file cannot be used; the message names it."""


def now() -> str:
    """The time as it is written everywhere: UTC, RFC 3339, milliseconds."""
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


class Registry:
    """Writes runs, batches, evaluations, checkpoints and events; usable from any thread."""

    def __init__(self, path: Path, poison: Poison, changed: Callable[[], None] = lambda: None) -> None:
        self.path = path
        self._poison = poison
        self._changed = changed  # called after each commit
        self._lock = threading.RLock()
        self._connection = sqlite3.connect(path, isolation_level=None, check_same_thread=False, timeout=10.0)
        try:
            self._prepare()
        except sqlite3.DatabaseError as error:
            self._connection.close()
            raise RegistryError(f"{path} is damaged or no registry: {error}; restore it from a copy") from error

    def _prepare(self) -> None:
        run = self._connection.execute
        run("PRAGMA journal_mode=WAL")
        run("PRAGMA synchronous=FULL")
        version = one(run("PRAGMA user_version"))
        if version not in (0, SCHEMA_VERSION):
            raise RegistryError(
                f"{self.path} has schema version {version}, this service reads {SCHEMA_VERSION}; use the "
                "service that wrote it"
            )
        if version == 0:
            self._connection.executescript(f"BEGIN IMMEDIATE; {TABLES} PRAGMA user_version={SCHEMA_VERSION}; COMMIT;")

    def close(self) -> None:
        with self._lock:
            self._connection.close()

    @contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        """One durable change, all or nothing. A full disk is a 507; any other database error poisons."""
        with self._lock:
            self._poison.check()
            try:
                self._connection.execute("BEGIN IMMEDIATE")
                try:
                    yield self._connection
                    self._connection.execute("COMMIT")
                finally:
                    if self._connection.in_transaction:
                        self._connection.execute("ROLLBACK")
            except sqlite3.DatabaseError as error:
                raise self._storage_problem(error) from error
        self._changed()

    def _storage_problem(self, error: sqlite3.DatabaseError) -> Problem:
        if error.sqlite_errorcode & 0xFF == sqlite3.SQLITE_FULL:
            return Problem(
                "disk-full",
                "the registry has no room; nothing was stored",
                retry_after_seconds=RETRY_STORAGE_SECONDS,
            )
        self._poison.set(f"registry: {error}")
        return Problem(
            "not-durable",
            "the registry could not be written; check the disk and start the service again",
            retry_after_seconds=RETRY_STORAGE_SECONDS,
        )

    # -- runs ---------------------------------------------------------------------------------------------

    def add_run(self, run_id: str, declaration_text: str, max_runs: int) -> RunRecord:
        """Enter a declared run, or find the one that was entered before under the same id.

        Raises the 422 problem when that one differs, and the 429 problem when there are ``max_runs``.
        """
        with self.transaction() as db:
            known = db.execute(f"SELECT {RUN_COLUMNS} FROM runs WHERE id = ?", (run_id,)).fetchone()
            if known is not None:
                return _same_declaration(run_from(known), declaration_text)
            count = one(db.execute("SELECT count(*) FROM runs"))
            if count >= max_runs:
                raise Problem("too-many-runs", f"{count} runs are kept, max_runs is {max_runs}; delete some")
            record = RunRecord(run_id, declaration_text, now(), "open", None, 0, 0)
            db.execute(
                f"INSERT INTO runs ({RUN_COLUMNS}) VALUES (?, ?, ?, ?, ?, ?, ?)",
                (run_id, declaration_text, record.created, "open", None, 0, 0),
            )
            n_parts = len(record.declaration.parts or ())
            db.executemany("INSERT INTO parts (run, part) VALUES (?, ?)", ((run_id, k) for k in range(n_parts)))
            add_event(db, run_id, "declared", {"name": record.declaration.name})
            return record

    def set_declaration(self, run_id: str, declaration_text: str) -> None:
        with self.transaction() as db:
            db.execute("UPDATE runs SET declaration = ? WHERE id = ?", (declaration_text, run_id))
            add_event(db, run_id, "changed", {})

    def set_status(self, run_id: str, status: str, reason: str | None = None) -> None:
        with self.transaction() as db:
            db.execute("UPDATE runs SET status = ?, reason = ? WHERE id = ?", (status, reason, run_id))
            add_event(db, run_id, status, {"reason": reason} if reason else {})

    def remove_run(self, run_id: str) -> None:
        with self.transaction() as db:
            for table in ("batches", "part_batches", "parts", "evaluations", "checkpoints", "events"):
                db.execute(f"DELETE FROM {table} WHERE run = ?", (run_id,))
            db.execute("DELETE FROM runs WHERE id = ?", (run_id,))
            add_event(db, run_id, "deleted", {})
            db.execute("DELETE FROM events WHERE id <= (SELECT max(id) FROM events) - ?", (MAX_EVENTS,))

    # -- what the worker finds out ------------------------------------------------------------------------

    def add_evaluation(self, run_id: str, n_snapshots: int, report: str, event: Mapping[str, Any]) -> None:
        """Keep one evaluation; entering the same one again after a restart changes nothing."""
        with self.transaction() as db:
            cursor = db.execute(
                "INSERT INTO evaluations (run, n_snapshots, at, report) VALUES (?, ?, ?, ?) "
                "ON CONFLICT DO UPDATE SET at = excluded.at, report = excluded.report "
                "WHERE report != excluded.report",
                (run_id, n_snapshots, now(), report),
            )
            if cursor.rowcount:
                add_event(db, run_id, "evaluation", event)

    def add_checkpoint(self, run_id: str, n_snapshots: int, n_bytes: int) -> None:
        with self.transaction() as db:
            db.execute(
                "INSERT OR REPLACE INTO checkpoints (run, n_snapshots, at, n_bytes) VALUES (?, ?, ?, ?)",
                (run_id, n_snapshots, now(), n_bytes),
            )
            add_event(db, run_id, "checkpoint", {"n_snapshots": n_snapshots})

    def drop_checkpoints(self, run_id: str, numbers: list[int]) -> None:
        with self.transaction() as db:
            db.executemany("DELETE FROM checkpoints WHERE run = ? AND n_snapshots = ?", [(run_id, n) for n in numbers])

    def mark_pruned(self, run_id: str, covered_snapshots: int, left_out: bool) -> list[int]:
        """Mark the batches that lie wholly before ``covered_snapshots``; return their sequence numbers.

        With ``left_out`` also those that wait behind a gap, which the user has left out at close.
        """
        with self.transaction() as db:
            rows = db.execute(
                "SELECT sequence FROM batches WHERE run = ?1 AND pruned = 0 "
                "AND (first_snapshot + n_snapshots <= ?2 OR (first_snapshot IS NULL AND ?3))",
                (run_id, covered_snapshots, left_out),
            ).fetchall()
            db.executemany(
                "UPDATE batches SET pruned = 1 WHERE run = ? AND sequence = ?", [(run_id, n) for (n,) in rows]
            )
            return [n for (n,) in rows]


def add_event(db: sqlite3.Connection, run_id: str, kind: str, data: Mapping[str, Any]) -> None:
    """Number an event inside the transaction of what it reports."""
    db.execute("INSERT INTO events (run, kind, at, data) VALUES (?, ?, ?, ?)", (run_id, kind, now(), json.dumps(data)))


def _same_declaration(known: RunRecord, declaration_text: str) -> RunRecord:
    if known.declaration_text != declaration_text:
        raise Problem(
            "key-reused",
            f"this Idempotency-Key came before with another declaration, for run {known.id}; use a new key",
        )
    return known


def find_run(db: sqlite3.Connection, run_id: str) -> RunRecord:
    """One run. Raises the 404 problem."""
    row = db.execute(f"SELECT {RUN_COLUMNS} FROM runs WHERE id = ?", (run_id,)).fetchone()
    if row is None:
        raise Problem("unknown-run", f"there is no run {run_id!r}; GET /v1/runs lists those there are")
    return run_from(row)


def find_batch(db: sqlite3.Connection, run_id: str, sequence: int, part: int | None = None) -> BatchRecord | None:
    """One batch, or None; with a part only when that part of it has come, and with that part's digest and size."""
    row = db.execute(
        f"SELECT {BATCH_COLUMNS} FROM batches WHERE run = ? AND sequence = ?", (run_id, sequence)
    ).fetchone()
    batch = None if row is None else batch_from(row)
    if batch is None or part is None:
        return batch
    came = db.execute(
        "SELECT digest, n_bytes FROM part_batches WHERE run = ? AND sequence = ? AND part = ?", (run_id, sequence, part)
    ).fetchone()
    return None if came is None else replace(batch, digest=came[0], n_bytes=came[1])
