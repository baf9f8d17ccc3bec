"""The parts of a running service and their life: opened under the lock, recovered, started, and closed again."""

from __future__ import annotations

import asyncio
import logging
import shutil
from collections import Counter
from concurrent.futures import ThreadPoolExecutor

from service.applier import Place
from service.board import Bell, Board, Published
from service.durable import DirectoryLock, Poison
from service.folders import Folders
from service.journal import sweep
from service.leases import Leases
from service.parts import RepeatNotes
from service.reading import ALL, Reader
from service.records import RunRecord
from service.registry import Registry
from service.settings import Settings
from service.shelf import checkpoint_report
from service.worker import Worker
from streaming.report import Convergence

logger = logging.getLogger("slackwater")

# The block in hand may take longer than this; it is then cut off by the end of the process and replayed.
STOP_SECONDS = 2.0


class Service:
    """Everything that handlers use; made once for each process."""

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        self.folders = Folders(settings.data_directory)
        self.poison = Poison()
        self.bell = Bell()
        self.board = Board(self.bell)
        self.leases = Leases()
        self.counters: Counter[str] = Counter()
        self.repeats = RepeatNotes()
        self.n_streams = self.n_waits = self.n_bodies = self.incoming_bytes = 0
        self._lock = DirectoryLock(settings.data_directory)
        try:
            self.folders.create()
            self.registry = Registry(self.folders.registry, self.poison, self.bell.ring)
        except BaseException:
            self._lock.release()
            raise
        self.reader = Reader(self.folders.registry)
        self.bodies = ThreadPoolExecutor(settings.max_open_bodies, "slackwater-body")
        self.commits = ThreadPoolExecutor(1, "slackwater-commit")
        self.worker = Worker(
            Place(settings, self.folders, self.registry, self.reader, self.board, self.leases, self.poison)
        )

    def start(self) -> None:
        """Recover what an earlier process left, and begin to apply. Called on the event loop."""
        self.bell.attach(asyncio.get_running_loop())
        self._recover()
        self.worker.start()

    def close(self) -> None:
        """Stop in order: no more bodies, no more commits, no more blocks, then the files."""
        self.bell.stop()
        self.bodies.shutdown(wait=True, cancel_futures=True)
        self.commits.shutdown(wait=True)
        self.worker.stop(STOP_SECONDS)
        self.bell.detach()
        if not self.worker.is_alive():
            self.reader.close()
            self.registry.close()
        self._lock.release()

    def _recover(self) -> None:
        self.folders.empty_refuse()
        runs = {run.id: run for run in self.reader.runs(limit=ALL)}
        for folder in self.folders.runs.iterdir():
            if folder.name not in runs:
                self.folders.remove_run(folder.name)
        for run in runs.values():
            self._recover_run(run)

    def _recover_run(self, run: RunRecord) -> None:
        """Drop what was never acknowledged, publish the last word, and take up the work."""
        folder = self.folders.run(run.id)
        folder.create(self.poison)
        sweep(folder, {folder.batch(*kept).name for kept in self.reader.kept_batches(run.id)})
        numbers = [checkpoint.n_snapshots for checkpoint in self.reader.checkpoints(run.id)]
        known = {folder.checkpoint(number).name for number in numbers}
        for path in folder.checkpoints.iterdir():
            if path.name not in known and ".damaged-" not in path.name:
                shutil.rmtree(path, ignore_errors=True)
        self.board.put(run.id, self._last_word(run, max(numbers, default=0)))
        if run.status in ("open", "closing"):
            self.worker.wake(run.id)

    def _last_word(self, run: RunRecord, covered: int) -> Published:
        text = self.reader.last_report(run.id)
        value = Published(n_absorbed=covered, n_applied=covered)
        if covered:
            last = self.reader.batch_holding(run.id, covered - 1)
            complete = last is not None and (last.first_snapshot or 0) + last.n_snapshots <= covered
            sequence = None if last is None else last.sequence - (not complete)
            value = Published(sequence if sequence is not None and sequence >= 0 else None, covered, covered)
        looked = None if text is None else Convergence.model_validate_json(text)
        saved = checkpoint_report(self.folders.run(run.id).checkpoint(covered)) if covered else None
        reports = [report for report in (saved, looked) if report is not None]  # of equals the look is the last word
        return value.with_report(max(reversed(reports), key=lambda one: one.n_snapshots)) if reports else value
