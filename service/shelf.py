"""The checkpoints of one run on disk: saved, verified, named in the registry, thinned, and loaded again."""

from __future__ import annotations

import logging
import shutil
import time
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import zarr

from service.folders import RunFolder
from service.leases import Leases
from service.policy import covered_snapshots, surplus_checkpoints
from service.reading import Reader
from service.registry import Registry, add_event
from streaming.checkpoint import STORE
from streaming.declaration import RunDeclaration
from streaming.errors import CheckpointError
from streaming.files import check_manifest
from streaming.report import Convergence
from streaming.stream import SnapshotStream

logger = logging.getLogger("slackwater")


class Shelf:
    """Keeps the checkpoints of a run; used by the worker thread alone."""

    def __init__(
        self, run_id: str, folder: RunFolder, registry: Registry, reader: Reader, leases: Leases, max_kept: int
    ) -> None:
        self._run_id, self._folder, self._leases, self._max_kept = run_id, folder, leases, max_kept
        self._registry, self._reader = registry, reader
        self.last_cost_seconds = 0.0
        self.last_end = time.monotonic()

    @property
    def numbers(self) -> list[int]:
        """Snapshots covered by each checkpoint, newest first."""
        return [record.n_snapshots for record in self._reader.checkpoints(self._run_id)]

    def save(self, stream: SnapshotStream) -> None:
        """Write, verify and register a checkpoint. Raises CheckpointError or OSError; then nothing has changed."""
        began = time.monotonic()
        path = self._folder.checkpoint(stream.n_applied)
        shutil.rmtree(path, ignore_errors=True)  # left by a crash before it was registered
        stream.save(path)
        check_manifest(path)
        self._registry.add_checkpoint(self._run_id, stream.n_applied, _size_bytes(path))
        self.last_end = time.monotonic()
        self.last_cost_seconds = self.last_end - began

    def tidy(self, closed: bool) -> None:
        """Remove surplus checkpoints, and the journal batches that the remaining ones cover."""
        numbers = self.numbers
        surplus = [
            number
            for number in surplus_checkpoints(numbers, self._max_kept)
            if not self._leases.held(self._run_id, number)
        ]
        if surplus:
            self._registry.drop_checkpoints(self._run_id, surplus)
            for number in surplus:
                shutil.rmtree(self._folder.checkpoint(number), ignore_errors=True)
        parts = self._reader.run(self._run_id).declaration.parts
        for sequence in self._registry.mark_pruned(self._run_id, covered_snapshots(numbers, closed), closed):
            for path in self._folder.batch_files(sequence, len(parts) if parts else None):
                path.unlink(missing_ok=True)

    def load(self, declaration: RunDeclaration) -> SnapshotStream:
        """The stream of the newest good checkpoint, or a new one. Damaged ones are set aside, not deleted."""
        for number in self.numbers:
            path = self._folder.checkpoint(number)
            try:
                return SnapshotStream.load(path, record_path=self._folder.record)
            except CheckpointError as error:
                self._set_aside(number, path, str(error))
        self._folder.record.unlink(missing_ok=True)
        return SnapshotStream(
            declaration,
            weights=load_array(self._folder.array("weights")),
            positions=load_array(self._folder.array("positions")),
            record_path=self._folder.record,
        )

    def _set_aside(self, number: int, path: Path, reason: str) -> None:
        logger.error("run %s: checkpoint %d is damaged and set aside: %s", self._run_id, number, reason)
        if path.exists():
            path.rename(path.with_name(f"{path.name}.damaged-{time.time_ns()}"))
        self._registry.drop_checkpoints(self._run_id, [number])
        with self._registry.transaction() as db:
            add_event(db, self._run_id, "checkpoint-damaged", {"n_snapshots": number, "reason": reason})


def checkpoint_report(path: Path) -> Convergence | None:
    """The report that a checkpoint holds; None when it cannot be read, which its loading will then say."""
    try:
        text = zarr.open_group(path / STORE, mode="r", zarr_format=3).attrs["convergence"]
        return Convergence.model_validate_json(str(text))
    except (OSError, KeyError, ValueError):
        return None


def load_array(path: Path) -> npt.NDArray[Any] | None:
    """An array stored by our own intake, which has checked it; None when none was given."""
    if not path.exists():
        return None
    values: npt.NDArray[Any] = np.load(path, allow_pickle=False)
    return values


def _size_bytes(folder: Path) -> int:
    return sum(file.stat().st_size for file in folder.rglob("*") if file.is_file())
