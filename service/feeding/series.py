"""Several files as one series of snapshots, planned once and read in pieces, one file open at a time."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from service.feeding.arranging import arrange
from service.feeding.choice import Choice
from service.feeding.opening import open_data
from service.feeding.variables import FeedError, Values, closing
from streaming.declaration import RunDeclaration

Array = npt.NDArray[np.float64]

MAX_BATCH_BYTES = 32 * 2**20  # in memory at once; large enough that requests cost nothing, small beside any run
MAX_TIMED_SNAPSHOTS = 1000  # uneven times travel in the address of the request


@dataclass(frozen=True)
class Member:
    """One file of the series: its first snapshot in the series, how many it holds, and their times."""

    path: Path
    first: int
    n_snapshots: int
    times: Array | None


@dataclass(frozen=True)
class Piece:
    """Snapshots (n, n_fields, n_points) from number ``first`` of the series on, and their times (n,) or None."""

    first: int
    snapshots: Values
    times: Array | None


@dataclass(frozen=True)
class Series:
    """The files in order."""

    members: tuple[Member, ...]
    declaration: RunDeclaration
    choice: Choice

    @property
    def n_snapshots(self) -> int:
        last = self.members[-1]
        return last.first + last.n_snapshots

    def time_of(self, number: int) -> float | None:
        """Time of one snapshot of the series, where the files give times."""
        for one in self.members:
            if one.first <= number < one.first + one.n_snapshots and one.times is not None:
                return float(one.times[number - one.first])
        return None

    def pieces(self, first: int, max_bytes: int = MAX_BATCH_BYTES) -> Iterator[Piece]:
        """Snapshots from number ``first`` on, in pieces of at most ``max_bytes`` (at least one). Raises FeedError."""
        row_bytes = self.declaration.n_rows * self.declaration.real_dtype.itemsize
        for one in self.members:
            count = max(1, min(max_bytes // row_bytes, 4096 if one.times is None else MAX_TIMED_SNAPSHOTS))
            begin = max(0, first - one.first)
            if begin >= one.n_snapshots:
                continue
            with closing(open_data(one.path)) as file:
                arranged = arrange(file, self.choice, self.declaration)
                if arranged.n_snapshots != one.n_snapshots:
                    raise FeedError(f"{one.path} changed while it was fed; feed it when it is complete")
                for start in range(begin, one.n_snapshots, count):
                    stop = min(start + count, one.n_snapshots)
                    times = None if one.times is None else one.times[start:stop]
                    yield Piece(one.first + start, arranged.read(start, stop), times)


def plan(paths: Sequence[Path], choice: Choice, declaration: RunDeclaration) -> Series:
    """Look into every file and number its snapshots. Raises FeedError."""
    members: list[Member] = []
    first, last_time = 0, None
    for path in paths:
        with closing(open_data(path)) as file:
            arranged = arrange(file, choice, declaration)
        if arranged.n_snapshots == 0:
            continue
        times = arranged.times
        if members and (times is None) != (members[-1].times is None):
            raise FeedError(f"{path}: some files give times and some do not; use --without-times, or name --time")
        if times is not None and last_time is not None and times[0] <= last_time:
            raise FeedError(
                f"{path} starts at time {times[0]:g}, the file before it ends at {last_time:g}; name the files in "
                "the order of their times"
            )
        members.append(Member(path, first, arranged.n_snapshots, times))
        first += arranged.n_snapshots
        last_time = None if times is None else float(times[-1])
    if not members:
        raise FeedError("the files hold no snapshots")
    return Series(tuple(members), declaration, choice)
