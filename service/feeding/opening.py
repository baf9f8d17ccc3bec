"""Which reader a file belongs to, by its name."""

from __future__ import annotations

import importlib
from pathlib import Path

from service.feeding.variables import DataFile, FeedError

# Suffix and module; each module has read(path). Imported only when such a file comes.
READERS = {
    ".npy": "read_npy",
    ".npz": "read_npz",
    ".csv": "read_csv",
    ".txt": "read_csv",
    ".dat": "read_csv",
    ".tsv": "read_csv",
    ".h5": "read_hdf5",
    ".hdf5": "read_hdf5",
    ".he5": "read_hdf5",
    ".nc": "read_netcdf",
    ".nc4": "read_netcdf",
    ".cdf": "read_netcdf",
    ".zarr": "read_zarr",
}


def is_known(path: Path) -> bool:
    """True when there is a reader for such a name."""
    return path.suffix.lower() in READERS


def open_data(path: Path) -> DataFile:
    """Open a file with the reader of its suffix. Raises FeedError."""
    if not path.exists():
        raise FeedError(f"{path} does not exist")
    if not is_known(path):
        raise FeedError(
            f"{path}: no reader for {path.suffix or 'a name without suffix'!r}; read are {', '.join(READERS)}"
        )
    module = importlib.import_module(f"service.feeding.{READERS[path.suffix.lower()]}")
    file: DataFile = module.read(path)
    return file
