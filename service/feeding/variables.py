"""What every reader gives: the named arrays of one file, sliced only where they are read."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

Values = npt.NDArray[Any]

UNNAMED = "data"  # the name of the one array in a file that has no names


class FeedError(ValueError):
    """A file cannot be fed as it is; the message names the file, what is wrong and what to do."""


@dataclass(frozen=True)
class Variable:
    """One array in a file.

    Attributes
    ----------
    dims : name of each axis, None where the file does not say
    unit : unit symbol, "" where the file does not say
    cut : (axis, start, stop) gives that part of the array
    """

    name: str
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    cut: Callable[[int, int, int], Values]
    dims: tuple[str | None, ...] = ()
    unit: str = ""

    def whole(self) -> Values:
        """The whole array; a number without axes comes as it is."""
        return self.cut(0, 0, self.shape[0] if self.shape else 1)

    @property
    def is_real(self) -> bool:
        return self.dtype.kind in "fiu"

    @property
    def text(self) -> str:
        """Name and shape, for messages."""
        return f"{self.name} {list(self.shape)}"


@dataclass(frozen=True)
class DataFile:
    """An open file: its variables by name, and how to close it."""

    path: Path
    variables: Mapping[str, Variable]
    close: Callable[[], None] = lambda: None

    def variable(self, name: str) -> Variable:
        """One variable. Raises FeedError."""
        found = self.variables.get(name) or self.variables.get(name.lstrip("/"))
        if found is None:
            raise FeedError(f"{self.path} holds no variable {name!r}; it holds {self.listing}")
        return found

    @property
    def listing(self) -> str:
        """All variables with their shapes, shortened."""
        texts = [one.text for one in self.variables.values()]
        more = f" and {len(texts) - 20} more" if len(texts) > 20 else ""
        return ", ".join(texts[:20]) + more or "no arrays"


def slicer(stored: Any) -> Callable[[int, int, int], Values]:
    """``cut`` over anything that has a shape and is sliced like an array; a number without axes comes whole."""

    def cut(axis: int, start: int, stop: int) -> Values:
        key = (slice(None),) * axis + (slice(start, stop),) if stored.shape else ()
        return np.asarray(stored[key])

    return cut


@contextmanager
def closing(file: DataFile) -> Iterator[DataFile]:
    """Close the file in the end."""
    try:
        yield file
    finally:
        file.close()
