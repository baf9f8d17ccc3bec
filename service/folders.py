"""Where everything lies in the data directory; the only place that knows the names."""

from __future__ import annotations

import shutil
from dataclasses import dataclass
from pathlib import Path

from service.durable import Poison, sync_directory


@dataclass(frozen=True)
class RunFolder:
    """The folder of one run."""

    path: Path

    @property
    def journal(self) -> Path:
        return self.path / "journal"

    @property
    def checkpoints(self) -> Path:
        return self.path / "checkpoints"

    @property
    def record(self) -> Path:
        """Temporal coefficients of the open run, kept by the engine."""
        return self.path / "coefficients.record"

    def array(self, name: str) -> Path:
        """``weights``, ``positions`` or ``triangles``, as an NPY file."""
        return self.path / f"{name}.npy"

    def batch(self, sequence: int, part: int | None = None) -> Path:
        """The file of one batch, or of what one part sent for it."""
        name = f"{sequence:015d}" if part is None else f"{sequence:015d}.{part:05d}"
        return self.journal / f"{name}.npy"

    def batch_files(self, sequence: int, n_parts: int | None) -> list[Path]:
        """All files that one batch can have."""
        return [self.batch(sequence, part) for part in ([None] if n_parts is None else range(n_parts))]

    def checkpoint(self, n_snapshots: int) -> Path:
        return self.checkpoints / f"{n_snapshots:012d}"

    def create(self, poison: Poison) -> None:
        """Make the folder and make it durable."""
        for folder in (self.journal, self.checkpoints):
            folder.mkdir(parents=True, exist_ok=True)
        for folder in (self.path, self.path.parent):
            sync_directory(folder, poison)


@dataclass(frozen=True)
class Folders:
    """The data directory."""

    root: Path

    @property
    def registry(self) -> Path:
        return self.root / "registry.sqlite"

    @property
    def runs(self) -> Path:
        return self.root / "runs"

    @property
    def refuse(self) -> Path:
        """Folders of deleted runs on their way out."""
        return self.root / "deleted"

    def run(self, run_id: str) -> RunFolder:
        return RunFolder(self.runs / run_id)

    def create(self) -> None:
        self.runs.mkdir(parents=True, exist_ok=True)
        self.refuse.mkdir(exist_ok=True)

    def remove_run(self, run_id: str) -> None:
        """Take a run's folder away in one step, then delete what was in it."""
        source = self.runs / run_id
        if source.exists():
            source.rename(self.refuse / run_id)
        self.empty_refuse()

    def empty_refuse(self) -> None:
        for folder in self.refuse.iterdir():
            shutil.rmtree(folder, ignore_errors=True)
