"""NPY files: one array without a name, mapped and not loaded."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from service.feeding.variables import UNNAMED, DataFile, FeedError, Variable, slicer


def read(path: Path) -> DataFile:
    """Open an NPY file; pickled objects are refused. Raises FeedError."""
    try:
        values = np.load(path, mmap_mode="r", allow_pickle=False)
    except (ValueError, EOFError, OSError) as error:
        raise FeedError(f"{path} cannot be read as NPY: {error}") from error
    return DataFile(path, {UNNAMED: Variable(UNNAMED, values.shape, values.dtype, slicer(values))})
