"""The compiled shim, and the block of memory through which a fault is set and read."""

from __future__ import annotations

import mmap
import shutil
import struct
import subprocess
from dataclasses import dataclass
from enum import IntEnum
from pathlib import Path

import pytest

SOURCE = Path(__file__).with_name("shim.c")
N_LOGGED = 16384
_HEAD = struct.Struct("4l")
_ENTRY = struct.Struct("16s112s")


class Kind(IntEnum):
    """What happens at the call."""

    NOTHING = 0
    KILL = 1
    TEAR = 2
    EIO_ONCE = 3
    EIO_ALWAYS = 4
    ENOSPC_ONCE = 5
    ENOSPC_ALWAYS = 6


@dataclass(frozen=True)
class Call:
    """One call below the data directory."""

    name: str
    path: str

    @property
    def place(self) -> str:
        """Which part of the store it changes."""
        for mark, place in (
            ("registry.sqlite", "registry"),
            ("/journal", "journal"),
            ("/checkpoints", "checkpoint"),
            (".record", "record"),
        ):
            if mark in self.path:
                return place
        return "folders"

    def __str__(self) -> str:
        return f"{self.name} {self.path}"


class Control:
    """Shared with one process; stays readable when that process is gone."""

    def __init__(self, path: Path, kind: Kind = Kind.NOTHING, at: int = 0) -> None:
        self.path = path
        with path.open("w+b") as file:
            file.truncate(_HEAD.size + _ENTRY.size * (1 + N_LOGGED))
            self._block = mmap.mmap(file.fileno(), 0)
        self._block[: _HEAD.size] = _HEAD.pack(kind, at, 0, 0)

    def _head(self) -> tuple[int, int, int, int]:
        kind, at, count, n_hit = _HEAD.unpack(self._block[: _HEAD.size])
        return kind, at, count, n_hit

    @property
    def count(self) -> int:
        return self._head()[2]

    @property
    def n_hit(self) -> int:
        return self._head()[3]

    @property
    def hit(self) -> Call | None:
        """The call that was the first to fail, None when none did."""
        return self._call(0) if self.n_hit else None

    @property
    def calls(self) -> list[Call]:
        assert self.count <= N_LOGGED, self.count
        return [self._call(1 + k) for k in range(self.count)]

    def _call(self, index: int) -> Call:
        start = _HEAD.size + index * _ENTRY.size
        name, path = _ENTRY.unpack(self._block[start : start + _ENTRY.size])
        return Call(name.split(b"\0")[0].decode(), path.split(b"\0")[0].decode())

    def lift(self) -> None:
        """From now on every call passes."""
        self._block[:8] = struct.pack("l", Kind.NOTHING)

    def close(self) -> None:
        self._block.close()
        self.path.unlink()


def compile_shim(folder: Path) -> Path:
    """Build the shim. Skips, and says so, where there is no compiler."""
    compiler = shutil.which("gcc")
    if compiler is None:
        pytest.skip("NO FAULT WAS INJECTED: gcc is missing (Debian packages gcc and libc6-dev)")
    library = folder / "shim.so"
    command = [compiler, "-O1", "-shared", "-fPIC", "-Wall", "-Wextra", "-Werror", str(SOURCE), "-o", str(library)]
    subprocess.run([*command, "-ldl"], check=True, timeout=60)
    return library
