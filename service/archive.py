"""A checkpoint directory as a zip file, stored and not compressed, made while it is sent."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Callable, Iterator
from pathlib import Path

READ_BYTES = 2**20
EPOCH = (1980, 1, 1, 0, 0, 0)  # the same bytes each time, whenever it is asked for


class Outlet(io.RawIOBase):
    """Takes what the zip writer writes, until it is fetched."""

    def __init__(self) -> None:
        self._parts: list[bytes] = []

    def writable(self) -> bool:
        return True

    def write(self, data: object) -> int:
        part = bytes(data)  # type: ignore[call-overload]
        self._parts.append(part)
        return len(part)

    def fetch(self) -> bytes:
        whole = b"".join(self._parts)
        self._parts.clear()
        return whole


def zipped(folder: Path, done: Callable[[], None]) -> Iterator[bytes]:
    """The bytes of the zip file; names start with the name of the folder."""
    outlet = Outlet()
    try:
        with zipfile.ZipFile(outlet, "w", zipfile.ZIP_STORED) as archive:
            for path in sorted(file for file in folder.rglob("*") if file.is_file()):
                info = zipfile.ZipInfo(f"{folder.name}/{path.relative_to(folder).as_posix()}", EPOCH)
                with archive.open(info, "w", force_zip64=True) as entry, path.open("rb") as source:
                    while piece := source.read(READ_BYTES):
                        entry.write(piece)
                        yield outlet.fetch()
        yield outlet.fetch()
    finally:
        done()
