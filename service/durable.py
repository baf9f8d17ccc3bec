"""Writing that survives a power cut, and what happens when it cannot be known to.

After a failed sync the kernel may call the lost pages clean, so that a second sync reports success (Rebello et
al., USENIX ATC 2020). A failed sync is therefore never retried: it poisons the store, which then acknowledges
nothing more until the service is started again and has read back what is there.
"""

from __future__ import annotations

import errno
import fcntl
import os
import shutil
from pathlib import Path
from typing import Any

from service.problems import Problem

NO_SPACE = (errno.ENOSPC, errno.EDQUOT)
RETRY_STORAGE_SECONDS = 30


class Poison:
    """Set once when durability is in doubt, and never cleared."""

    def __init__(self) -> None:
        self.reason: str | None = None

    def set(self, reason: str) -> None:
        self.reason = self.reason or reason

    def check(self) -> None:
        """Raise the 503 problem when storage has failed."""
        if self.reason is not None:
            raise Problem(
                "not-durable",
                "a write to disk could not be confirmed, so nothing more is accepted; check the disk and start "
                "the service again (what was acknowledged before is read back then)",
                retry_after_seconds=RETRY_STORAGE_SECONDS,
            )


def sync_file(descriptor: int, poison: Poison, name: str) -> None:
    """fsync one open file; a failure poisons. Raises the 503 problem."""
    try:
        os.fsync(descriptor)
    except OSError as error:
        poison.set(f"fsync of {name}: {error}")
        poison.check()


def sync_directory(folder: Path, poison: Poison) -> None:
    """fsync a directory, which makes renames inside it durable; a failure poisons."""
    try:
        descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    except OSError as error:
        poison.set(f"open of {folder}: {error}")
        poison.check()
        return
    try:
        sync_file(descriptor, poison, str(folder))
    finally:
        os.close(descriptor)


def storage_problem(error: OSError, left: str = "nothing of it was stored") -> Problem:
    """What to tell a client whose body could not be written (before anything was promised); ``left`` of it is there."""
    if error.errno in NO_SPACE:
        return Problem(
            "disk-full",
            f"the disk filled up while the body was written; {left}",
            retry_after_seconds=RETRY_STORAGE_SECONDS,
        )
    return Problem("stopping", f"the body could not be written; {left}", retry_after_seconds=RETRY_STORAGE_SECONDS)


def check_free_space(folder: Path, coming_bytes: int, min_free_bytes: int) -> None:
    """Refuse what would leave less than ``min_free_bytes``. Raises the 507 problem."""
    free = shutil.disk_usage(folder).free
    if free - coming_bytes < min_free_bytes:
        raise Problem(
            "disk-full",
            f"{free} bytes are free, {coming_bytes} are coming, and {min_free_bytes} must stay free; "
            "delete runs or make room",
            retry_after_seconds=RETRY_STORAGE_SECONDS,
        )


class DirectoryLock:
    """Holds the data directory for one process; the kernel frees it when the process ends, however it ends."""

    def __init__(self, folder: Path) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self._file: Any = open(folder / "lock", "a+")  # noqa: SIM115 - held for the life of the process
        try:
            fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            self._file.seek(0)
            owner = self._file.read(40).strip() or "unknown"
            self._file.close()
            raise DirectoryInUseError(
                f"{folder} is in use by another service (process {owner}); stop it, or choose another --data-directory"
            ) from error
        self._file.truncate(0)
        self._file.write(f"{os.getpid()}\n")
        self._file.flush()

    def release(self) -> None:
        self._file.close()


class DirectoryInUseError(RuntimeError):
    """A second service was started on the same data directory."""
