"""Accepted batches as files: written beside, synced, and renamed to their sequence number.

A `Draft` is a body on its way in. It is checked while it is written (header, size, finite values, digest), so
that a body which is refused leaves nothing behind. What stands in the journal under a sequence number and in the
registry has been acknowledged, or may have been; a file the registry does not know has not.
"""

from __future__ import annotations

import hashlib
import logging
import os
import threading
import uuid
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from service.durable import Poison, sync_directory, sync_file
from service.folders import RunFolder
from service.npy import MAX_HEADER_BYTES, ArrayHeader, NpyError, header_length, parse_header
from service.problems import Problem
from service.records import BatchRecord, PartBatch
from service.shapes import Expected
from streaming.declaration import RunDeclaration
from streaming.files import PASSING

logger = logging.getLogger("slackwater")

DRAFT_SUFFIX = ".part"


class JournalError(RuntimeError):
    """Acknowledged data are missing or damaged; the message names the file."""


class Draft:
    """A body being written; belongs to one request.

    Its thread may still be writing when the request is given up, so closing waits for it: a descriptor must not be
    written to after its number has gone to another file.
    """

    def __init__(self, folder: Path, n_bytes: int, expected: Expected, poison: Poison) -> None:
        self.path = folder / f"{uuid.uuid4().hex}{DRAFT_SUFFIX}"
        self._n_bytes, self._expected, self._poison = n_bytes, expected, poison
        self._file = self.path.open("xb", buffering=0)
        self._lock = threading.Lock()
        self._kept = False
        self._hash = hashlib.sha256()
        self._rest = b""  # bytes of the header so far, then of a value cut by the end of a piece
        self._n_values = 0
        self.received_bytes = 0
        self.header: ArrayHeader | None = None

    def write(self, piece: bytes) -> None:
        """Take the next piece of the body. Raises the 4xx problem that says what is wrong, or OSError."""
        self.received_bytes += len(piece)
        if self.received_bytes > self._n_bytes:
            raise Problem("bad-request", f"the body is longer than its Content-Length {self._n_bytes}")
        self._hash.update(piece)
        self._rest += piece
        if self.header is None:
            self._take_header()
        if self.header is not None:
            self._check_values(self.header)
        with self._lock:
            _write_all(self._file.fileno(), piece)

    def _take_header(self) -> None:
        try:
            length = header_length(self._rest)
            if length is None or len(self._rest) < length:
                return
            header = parse_header(self._rest[:length], self._expected.types)
        except NpyError as error:
            raise Problem("invalid-array", f"{error}") from error
        self._expected.check(header)
        if length + header.data_bytes != self._n_bytes:
            raise Problem(
                "invalid-array",
                f"an array of shape {list(header.shape)} and type {header.dtype.str} needs "
                f"{length + header.data_bytes} bytes with its header, the body has {self._n_bytes}",
            )
        self.header, self._rest = header, self._rest[length:]

    def _check_values(self, header: ArrayHeader) -> None:
        """Refuse what is not finite, or not finite in the declared type."""
        whole = len(self._rest) // header.dtype.itemsize
        values = np.frombuffer(self._rest, header.dtype, whole)
        with np.errstate(over="ignore", invalid="ignore"):
            finite = np.isfinite(values.astype(self._expected.dtype, copy=False))
        if not finite.all():
            bad = int(np.argmin(finite))
            raise _not_finite(self._expected, header, self._n_values + bad, float(values[bad]))
        self._n_values += whole
        self._rest = self._rest[whole * header.dtype.itemsize :]

    def digest(self) -> tuple[ArrayHeader, bytes]:
        """Header and sha-256 of the whole body. Raises the 400 and 422 problems of one that ended early."""
        if self.received_bytes != self._n_bytes:
            raise Problem("torn-body", f"{self.received_bytes} of {self._n_bytes} bytes came; send it again")
        if self.header is None:
            raise Problem("invalid-array", f"the body of {self._n_bytes} bytes ends within the NPY header")
        return self.header, self._hash.digest()

    def sync(self) -> None:
        """Bring the bytes to the disk. Raises the 503 problem."""
        with self._lock:
            sync_file(self._file.fileno(), self._poison, self.path.name)
            self._file.close()

    def keep(self, path: Path) -> None:
        """Rename to the final name, durably. Raises OSError or the 503 problem."""
        os.replace(self.path, path)
        self._kept = True
        sync_directory(path.parent, self._poison)

    def discard(self) -> None:
        """Leave nothing behind; harmless after `keep`.

        A draft that cannot be removed must not turn a receipt into an error; the next start removes it.
        """
        with self._lock:
            self._file.close()
        if self._kept:
            return
        try:
            self.path.unlink(missing_ok=True)
        except OSError as error:
            logger.warning("the draft %s could not be removed: %s", self.path, error)


def _not_finite(expected: Expected, header: ArrayHeader, index: int, value: float) -> Problem:
    place = expected.place(header, index)
    where = ", ".join(f"{name} {number}" for name, number in place.items())
    why = f"{value}" if not np.isfinite(value) else f"{value}, too large for {expected.dtype}"
    return Problem(
        "not-finite",
        f"the {expected.what} at {where} (counted from 0) is {why}; nothing was stored",
        **place,
    )


def _write_all(descriptor: int, piece: bytes) -> None:
    view = memoryview(piece)
    while view:
        view = view[os.write(descriptor, view) :]


class JournalFile:
    """The stored body of one batch, or of one part of it, read back a few snapshots at a time."""

    def __init__(self, path: Path, n_bytes: int, digest: bytes) -> None:
        self.path, self._digest = path, digest
        try:
            with path.open("rb") as file:
                start = file.read(MAX_HEADER_BYTES)
            length = header_length(start)
            if length is None or path.stat().st_size != n_bytes:
                raise JournalError(f"{path} has not the {n_bytes} bytes that were acknowledged")
            self._header = parse_header(start[:length])
        except (OSError, NpyError) as error:
            if isinstance(error, OSError) and error.errno in PASSING:
                raise
            raise JournalError(f"{path} cannot be read: {error}; restore it from a copy") from error

    def verify(self) -> None:
        """Compare with the digest that was acknowledged. Raises JournalError."""
        with self.path.open("rb") as file:
            digest = hashlib.file_digest(file, "sha256").digest()
        if digest != self._digest:
            raise JournalError(f"{self.path} is damaged (its sha-256 has changed); restore it from a copy")

    def values(self, start: int, stop: int, n_rows: int) -> npt.NDArray[Any]:
        """Snapshots [start, stop), (n, n_rows), in the type in which they came."""
        values = np.fromfile(
            self.path,
            self._header.dtype,
            (stop - start) * n_rows,
            offset=self._header.header_bytes + start * n_rows * self._header.dtype.itemsize,
        )
        if len(values) != (stop - start) * n_rows:
            raise JournalError(f"{self.path} ended early while it was read")
        return values.reshape(stop - start, n_rows)


class JournalBatch:
    """One stored batch: one file, or one for each of ``parts``."""

    def __init__(self, folder: RunFolder, record: BatchRecord, parts: Sequence[PartBatch] = ()) -> None:
        self.record = record
        self._files = [JournalFile(folder.batch(part.sequence, part.part), part.n_bytes, part.digest) for part in parts]
        if not parts:
            self._files = [JournalFile(folder.batch(record.sequence), record.n_bytes, record.digest)]

    def verify(self) -> None:
        """Compare all files with the digests that were acknowledged. Raises JournalError."""
        for file in self._files:
            file.verify()

    def snapshots(self, start: int, stop: int, declaration: RunDeclaration) -> npt.NDArray[Any]:
        """Snapshots [start, stop) of the batch, (n, n_rows), in the declared dtype."""
        if declaration.parts is None:
            return self._files[0].values(start, stop, declaration.n_rows).astype(declaration.real_dtype, copy=False)
        n_fields = len(declaration.fields)
        whole = np.empty((stop - start, n_fields, declaration.n_points), declaration.real_dtype)
        for part, file in zip(declaration.parts, self._files, strict=True):
            rows = file.values(start, stop, n_fields * part.n_points)
            whole[:, :, part.start : part.stop] = rows.reshape(stop - start, n_fields, part.n_points)
        return whole.reshape(stop - start, declaration.n_rows)


def sweep(folder: RunFolder, kept: set[str]) -> list[Path]:
    """Remove what was never acknowledged, or was covered before: drafts, and files the registry does not keep."""
    removed = [path for path in folder.journal.glob("*") if path.name not in kept]
    for path in removed:
        path.unlink(missing_ok=True)
    return removed
