"""Directories that appear whole or not at all: written beside, synced file by file, listed with digests, renamed."""

from __future__ import annotations

import errno
import hashlib
import json
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from streaming.errors import CheckpointError

MANIFEST = "manifest.json"

# Want of handles or memory passes, and says nothing of the file that could not be opened for it.
PASSING = (errno.EMFILE, errno.ENFILE, errno.ENOMEM)


@contextmanager
def whole_directory(path: Path) -> Iterator[Path]:
    """Give a directory to write into; on leaving, sync it, add the manifest and rename it to ``path``.

    Raises
    ------
    CheckpointError
        if ``path`` exists; nothing is ever overwritten
    """
    if path.exists():
        raise CheckpointError(f"{path} exists already; choose another path, nothing is overwritten")
    partial = path.with_name(f"{path.name}.partial")
    shutil.rmtree(partial, ignore_errors=True)
    partial.mkdir(parents=True)
    try:
        yield partial
        _write_manifest(partial)
        for folder, _, _ in os.walk(partial, topdown=False):
            sync_directory(Path(folder))
        partial.rename(path)
    except BaseException:
        shutil.rmtree(partial, ignore_errors=True)
        raise
    sync_directory(path.parent)


def check_manifest(path: Path) -> None:
    """Compare every file of a directory with its manifest.

    Raises
    ------
    CheckpointError
        naming the first file that is missing, damaged or not listed
    OSError
        if nothing can be said of the files at the moment
    """
    try:
        listed = json.loads((path / MANIFEST).read_text())["files"]
    except (OSError, ValueError, KeyError) as error:
        if isinstance(error, OSError) and error.errno in PASSING:
            raise
        raise CheckpointError(f"{path / MANIFEST} is missing or damaged; this is not a whole checkpoint") from error
    for name, expected in listed.items():
        file = path / name
        if not file.is_file():
            raise CheckpointError(f"{file} is missing; use an older checkpoint")
        if _digest(file) != expected["sha256"]:
            raise CheckpointError(f"{file} does not match its digest in {MANIFEST}; use an older checkpoint")
    extra = {str(f.relative_to(path)) for f in path.rglob("*") if f.is_file()} - set(listed) - {MANIFEST}
    if extra:
        raise CheckpointError(f"{path / min(extra)} is not listed in {MANIFEST}; someone wrote into the checkpoint")


def _write_manifest(path: Path) -> None:
    files = sorted(f for f in path.rglob("*") if f.is_file())
    listed = {}
    for file in files:
        _sync_file(file)
        listed[str(file.relative_to(path))] = {"bytes": file.stat().st_size, "sha256": _digest(file)}
    manifest = path / MANIFEST
    manifest.write_text(json.dumps({"files": listed}, indent=1))
    _sync_file(manifest)


def _digest(file: Path) -> str:
    with file.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _sync_file(file: Path) -> None:
    handle = os.open(file, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def sync_directory(path: Path) -> None:
    """Bring a directory's entries to the disk, so that a rename in it survives a power cut."""
    handle = os.open(path, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
