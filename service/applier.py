"""Feeds one run's stored batches to its stream, in order and in whole blocks; used by the worker thread alone."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace

from service.board import Board, Published
from service.durable import Poison
from service.folders import Folders
from service.journal import JournalBatch
from service.leases import Leases
from service.policy import Progress, checkpoint_due
from service.reading import Reader
from service.records import BatchRecord
from service.registry import Registry
from service.settings import Settings
from service.shelf import Shelf
from streaming.basis import memory_needed_bytes
from streaming.errors import NotReadyError
from streaming.report import Convergence, State
from streaming.stream import SnapshotStream

# Largest share of the worker's time spent on refreshing the published numbers between looks.
REFRESH_SHARE = 0.05


@dataclass(frozen=True)
class Place:
    """What every applier works with."""

    settings: Settings
    folders: Folders
    registry: Registry
    reader: Reader
    board: Board
    leases: Leases
    poison: Poison


class Applier:
    """One run's stream, opened when its first batch is there, and how far it has come."""

    def __init__(self, run_id: str, place: Place) -> None:
        self.run_id = run_id
        self._place = place
        self._folder = place.folders.run(run_id)
        self._shelf = Shelf(
            run_id, self._folder, place.registry, place.reader, place.leases, place.settings.max_checkpoints
        )
        self.declaration = place.reader.run(run_id).declaration
        self._stream: SnapshotStream | None = None
        self._batch: JournalBatch | None = None
        # What an earlier process may have stored, also ahead of a gap, is compared with its digests before it is used.
        last = place.reader.last_sequence(run_id)
        self._trusted_from = 0 if last is None else last + 1
        self._uncovered_bytes = 0
        self._n_looks = 0
        self._owed = False  # a look has passed whose checkpoint was too dear at the time
        self._refreshed = (0.0, 0.0)

    def step(self) -> bool:
        """Apply at most one block; False when there is nothing to do. Raises what the engine or the disk raise."""
        run = self._place.reader.run(self.run_id)
        known = self._stream.n_snapshots if self._stream else max(self._shelf.numbers, default=0)
        if run.status == "closing" or (run.status == "open" and run.next_snapshot > known):
            stream = self._open()
            record = self._place.reader.batch_holding(self.run_id, stream.n_snapshots)
            if record is not None:
                self._absorb(stream, record)
                return True
            if run.status == "closing":
                self._finish(stream)
        return False

    def _open(self) -> SnapshotStream:
        if self._stream is None:
            self.declaration = self._place.reader.run(self.run_id).declaration
            self._stream = self._shelf.load(self.declaration)
            self._n_looks = len(self._stream.history)
            self._batch = None
        return self._stream

    def _absorb(self, stream: SnapshotStream, record: BatchRecord) -> None:
        batch = self._open_batch(record)
        assert record.first_snapshot is not None
        start = stream.n_snapshots - record.first_snapshot
        stop = min(record.n_snapshots, start + stream.room)
        times = None if record.times is None else record.times[start:stop]
        blocks = stream.absorb(batch.snapshots(start, stop, self.declaration), times)
        self._uncovered_bytes += record.n_bytes * (stop - start) // record.n_snapshots
        complete = record.sequence if stop == record.n_snapshots else record.sequence - 1
        self._publish(stream, blocks, complete if complete >= 0 else None)

    def _open_batch(self, record: BatchRecord) -> JournalBatch:
        if self._batch is None or self._batch.record.sequence != record.sequence:
            parts = self._place.reader.part_batches(self.run_id, record.sequence)
            batch = JournalBatch(self._folder, record, parts)
            if record.sequence < self._trusted_from:
                batch.verify()
            self._batch = batch
        return self._batch

    def _publish(self, stream: SnapshotStream, blocks: int, applied_through: int | None) -> None:
        before = self._place.board.get(self.run_id)
        value = replace(
            before,
            applied_through=applied_through,
            n_absorbed=stream.n_snapshots,
            n_applied=stream.n_applied,
        )
        looked = len(stream.history) > self._n_looks
        if looked:
            self._n_looks = len(stream.history)
            value = value.with_report(stream.history[-1])
            self._record(stream.history[-1], before.verdict)
        elif blocks:
            value = self._refresh(stream, value)
        self._owed |= looked
        due = self._checkpoint_due(stream, looked, before.verdict, value)
        if due and before.report is not None:  # the first result is published with the checkpoint to read it from
            self._place.board.put(self.run_id, value)
        if due:
            self._shelf.save(stream)
            self._uncovered_bytes, self._owed = 0, False
            self._shelf.tidy(closed=False)
        self._place.board.put(self.run_id, value)

    def _refresh(self, stream: SnapshotStream, value: Published) -> Published:
        """Bring the published numbers up to date between looks, when that costs little."""
        last, cost = self._refreshed
        now = time.monotonic()
        if value.report is not None and cost > REFRESH_SHARE * (now - last):
            return value
        try:
            value = value.with_report(stream.convergence())
        except NotReadyError:
            return value
        self._refreshed = (time.monotonic(), time.monotonic() - now)
        return value

    def _record(self, report: Convergence, before: State) -> None:
        bounds = [group.angle_bound_deg for group in report.groups]
        event = {
            "n_snapshots": report.n_snapshots,
            "verdict": report.verdict.state.value,
            "changed": report.verdict.state is not before,
            "largest_angle_bound_deg": max(bounds, default=None),
        }
        self._place.registry.add_evaluation(self.run_id, report.n_snapshots, report.model_dump_json(), event)

    def _checkpoint_due(self, stream: SnapshotStream, looked: bool, before: State, value: Published) -> bool:
        settings = self._place.settings
        if stream.n_applied != stream.n_snapshots:
            return False
        progress = Progress(
            owed=self._owed,
            turned_settled=looked and value.verdict is State.SETTLED and before is not State.SETTLED,
            n_checkpoints=len(self._shelf.numbers),
            seconds_since_last=time.monotonic() - self._shelf.last_end,
            last_cost_seconds=self._shelf.last_cost_seconds,
            uncovered_bytes=self._uncovered_bytes,
        )
        return checkpoint_due(progress, settings.checkpoint_share, settings.max_journal_bytes)

    def _finish(self, stream: SnapshotStream) -> None:
        """Apply the short last block, keep the final checkpoint, and mark the run closed."""
        before = self._place.board.get(self.run_id)
        stream.close()
        value = replace(before, n_absorbed=stream.n_snapshots, n_applied=stream.n_applied)
        if len(stream.history) > self._n_looks:
            self._record(stream.history[-1], before.verdict)
        if stream.n_applied:
            value = value.with_report(stream.convergence())
        if stream.n_applied not in (0, *self._shelf.numbers):
            self._shelf.save(stream)
        self._place.board.put(self.run_id, value)
        self._shelf.tidy(closed=True)
        self.release()
        self._folder.record.unlink(missing_ok=True)
        self._place.registry.set_status(self.run_id, "closed")

    @property
    def memory_bytes(self) -> int:
        """Memory held now."""
        return 0 if self._stream is None else memory_needed_bytes(self.declaration)

    def release(self) -> None:
        """Let go of the stream; what was applied since the last checkpoint is replayed when it is needed again."""
        self._stream = None
        self._batch = None
        self._uncovered_bytes = 0
