"""The file that many solvers look for at each step in order to end themselves in good order."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path


def check_place(path: Path) -> None:
    """Raise ValueError when no file can be left at ``path``; asked before a wait of days, not after it."""
    if path.is_dir():
        raise ValueError(f"{path} is a directory; name the file to leave in it")
    if not path.absolute().parent.is_dir():
        raise ValueError(f"{path.absolute().parent} is no directory; make it first, {path.name} is left in it")
    if not os.access(path.absolute().parent, os.W_OK):
        raise ValueError(f"{path.absolute().parent} cannot be written to; {path.name} could not be left in it")


def leave(path: Path, text: str) -> None:
    """Write the file beside and rename it, so that a solver never reads half of it; an old one is replaced.

    Raises
    ------
    OSError
        if it cannot be written
    """
    handle, partial = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.absolute().parent)
    try:
        with os.fdopen(handle, "w") as file:
            os.fchmod(file.fileno(), 0o644)  # the solver may run as somebody else
            file.write(f"{text}\n")
            file.flush()
            os.fsync(file.fileno())
        Path(partial).replace(path)
    except BaseException:
        Path(partial).unlink(missing_ok=True)
        raise
