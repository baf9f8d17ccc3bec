"""Tables of the registry, and the version that says how to read them."""

from __future__ import annotations

SCHEMA_VERSION = 1

# Times of a batch are float64 little-endian, NULL when the declared step gives them. first_snapshot is NULL while
# an earlier batch is missing. A batch row stays for ever: it is what makes a repeat recognisable. In a run that
# comes in parts the row is made with the first part; it counts once missing_parts is 0, and its digest is then that of
# the digests of its parts. A row of parts stands for one declared part: n_stored batches came, those before
# next_sequence without a gap.
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
    missing_parts INTEGER NOT NULL DEFAULT 0,
    arrived TEXT NOT NULL,
    pruned INTEGER NOT NULL DEFAULT 0,
    PRIMARY KEY (run, sequence)
) WITHOUT ROWID;
CREATE UNIQUE INDEX batches_by_key ON batches (run, idempotency_key) WHERE idempotency_key IS NOT NULL;
CREATE INDEX batches_by_snapshot ON batches (run, first_snapshot);
CREATE INDEX batches_kept ON batches (run, n_bytes) WHERE pruned = 0;
CREATE TABLE part_batches (
    run TEXT NOT NULL,
    sequence INTEGER NOT NULL,
    part INTEGER NOT NULL,
    digest BLOB NOT NULL,
    n_bytes INTEGER NOT NULL,
    PRIMARY KEY (run, sequence, part)
) WITHOUT ROWID;
CREATE TABLE parts (
    run TEXT NOT NULL,
    part INTEGER NOT NULL,
    n_stored INTEGER NOT NULL DEFAULT 0,
    next_sequence INTEGER NOT NULL DEFAULT 0,
    last_stored TEXT,
    PRIMARY KEY (run, part)
) WITHOUT ROWID;
CREATE INDEX parts_by_progress ON parts (run, next_sequence);
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
