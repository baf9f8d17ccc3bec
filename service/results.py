"""Arrays read from the newest checkpoint: never from the live stream, so that no reader waits for an update."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import zarr

from service.core import Service
from service.problems import Problem
from streaming.checkpoint import STORE
from streaming.declaration import RunDeclaration

Numbers = npt.NDArray[Any]


@dataclass(frozen=True)
class Source:
    """A checkpoint held open for reading."""

    n_snapshots: int
    path: Path
    declaration: RunDeclaration

    def array(self, name: str) -> Any:
        """One named array of the checkpoint, read only when it is sliced."""
        return zarr.open_group(self.path / STORE, mode="r", zarr_format=3)[name]

    @property
    def attributes(self) -> dict[str, Any]:
        """What the checkpoint says of itself: declaration, report, title."""
        return zarr.open_group(self.path / STORE, mode="r", zarr_format=3).attrs.asdict()

    @property
    def n_modes(self) -> int:
        return int(self.array("mode").shape[0])

    def mode_field(self, mode: int, field: str) -> Numbers:
        """One field of one mode (counted from 0), flat."""
        values: Numbers = np.asarray(self.array(f"mode_{field}")[mode]).reshape(-1)
        return values

    def mean_field(self, field: str) -> Numbers:
        values: Numbers = np.asarray(self.array(f"mean_{field}")[...]).reshape(-1)
        return values

    def pieces(self, modes: range) -> Iterator[Numbers]:
        """Mode by mode and field by field, so that no more than one is in memory."""
        for mode in modes:
            for field in self.declaration.fields:
                yield self.mode_field(mode, field.name)

    def check_count(self, name: str, wanted: int) -> int:
        """Return ``wanted`` when so many modes are kept. Raises the 422 problem."""
        if not 1 <= wanted <= self.n_modes:
            raise Problem(
                "invalid-request",
                f"{name}={wanted}: the checkpoint at {self.n_snapshots} snapshots holds modes 1 to {self.n_modes}",
            )
        return wanted


@contextmanager
def newest(service: Service, run_id: str) -> Iterator[Source]:
    """Hold the newest checkpoint of a run in place. Raises the 404 problems."""
    source = take_newest(service, run_id)
    try:
        yield source
    finally:
        service.leases.give_back(run_id, source.n_snapshots)


@contextmanager
def chosen(service: Service, run_id: str, checkpoint: int | None) -> Iterator[Source]:
    """Hold the checkpoint at so many snapshots in place, or the newest. Raises the 404 problems."""
    source = take_newest(service, run_id) if checkpoint is None else take(service, run_id, checkpoint)
    try:
        yield source
    finally:
        service.leases.give_back(run_id, source.n_snapshots)


def take_newest(service: Service, run_id: str) -> Source:
    """Like `newest`, for answers that outlive the handler; the caller gives the lease back."""
    run = service.reader.run(run_id)
    records = service.reader.checkpoints(run_id)
    if not records:
        raise Problem(
            "not-yet",
            f"run {run_id} holds {run.next_snapshot} snapshots and no result yet; the first needs "
            f"{run.declaration.length_of_block}",
        )
    return take(service, run_id, records[0].n_snapshots)


def take(service: Service, run_id: str, n_snapshots: int) -> Source:
    """Hold a given checkpoint. Raises the 404 problem."""
    declaration = service.reader.run(run_id).declaration
    service.leases.take(run_id, n_snapshots)
    path = service.folders.run(run_id).checkpoint(n_snapshots)
    if not path.is_dir():
        service.leases.give_back(run_id, n_snapshots)
        raise Problem("not-found", f"run {run_id} has no checkpoint at {n_snapshots} snapshots (any more)")
    return Source(n_snapshots, path, declaration)
