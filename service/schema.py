"""Tables of the registry, and the version that says how to read them."""

from __future__ import annotations

SCHEMA_VERSION = 1

# Times of a batch are float64 little-endian, NULL when the declared step gives them. first_snapshot is NULL while
# an earlier batch is missing. A batch row stays for ever: it is what makes a repeat recognisable.
TABLES = """
CREATE TABLE runs (
    id TEXT PRIMARY KEY,
    declaration TEXT NOT NULL,
    created TEXT NOT NULL,
    status TEXT NOT NULL CHECK (status IN ('open', 'closing', 'closed', 'failed')),
    reason TEXT,
    next_sequence INTEGER NOT NULL DEFAULT 0,
    next_snapshot INTEGER NOT NULL DEFAULT 0
);
CREATE TABLE batches (
    run TEXT NOT NULL,
    sequence INTEGER NOT NULL,
    digest BLOB NOT NULL,
    n_snapshots INTEGER NOT NULL,
    n_bytes INTEGER NOT NULL,
    first_snapshot INTEGER,
    times BLOB,
    first_time REAL,
    last_time REAL,
    idempotency_key TEXT,
    pruned INTEGER NOT NULL DEFAULT 0,
    PRIMARY KEY (run, sequence)
) WITHOUT ROWID;
CREATE UNIQUE INDEX batches_by_key ON batches (run, idempotency_key) WHERE idempotency_key IS NOT NULL;
CREATE INDEX batches_by_snapshot ON batches (run, first_snapshot);
CREATE INDEX batches_kept ON batches (run, n_bytes) WHERE pruned = 0;
CREATE TABLE evaluations (
    run TEXT NOT NULL,
    n_snapshots INTEGER NOT NULL,
    at TEXT NOT NULL,
    report TEXT NOT NULL,
    PRIMARY KEY (run, n_snapshots)
) WITHOUT ROWID;
CREATE TABLE checkpoints (
    run TEXT NOT NULL,
    n_snapshots INTEGER NOT NULL,
    at TEXT NOT NULL,
    n_bytes INTEGER NOT NULL,
    PRIMARY KEY (run, n_snapshots)
) WITHOUT ROWID;
CREATE TABLE events (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    run TEXT NOT NULL,
    kind TEXT NOT NULL,
    at TEXT NOT NULL,
    data TEXT NOT NULL
);
CREATE INDEX events_by_run ON events (run, id);
"""
