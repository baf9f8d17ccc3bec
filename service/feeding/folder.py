"""A folder that a rig writes into, looked at again and again: which files are whole, and in which order they come.

Polled, since notifications do not come through network file systems. A file counts as whole when its size and its time
of change have not moved for the settling time by our own clock; the clock of the machine that writes may be wrong.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from fnmatch import fnmatch
from pathlib import Path
from typing import Literal

from service.feeding.opening import is_known

Order = Literal["name", "time"]

DONE, REFUSED = "done", "refused"
MARK = ".posted"  # a file beside one that stays where it is
TEMPORARY = (
    "*.tmp",
    "*.temp",
    "*.part",
    "*.partial",
    "*.swp",
    "*~",
)  # names under which programs write (common practice)


@dataclass(frozen=True)
class Sighting:
    """A file as it was seen: of a directory, the sum of what is in it."""

    name: str
    n_bytes: int
    changed_ns: int


@dataclass(frozen=True)
class Seen:
    """A sighting, and since when (seconds of a clock that only runs forward) the file has looked like that."""

    sighting: Sighting
    since: float


def look(folder: Path, pattern: str) -> list[Sighting]:
    """All files of the folder that may be data, in no order; what vanishes while it is looked at is left out."""
    found = []
    for path in folder.iterdir():
        if _is_data(path.name, pattern) and is_known(path):
            try:
                found.append(sight(path))
            except FileNotFoundError:
                continue
    return found


def sight(path: Path) -> Sighting:
    """Size and time of change of a file, or of all that is in a directory. Raises FileNotFoundError."""
    states = [path.stat()]
    if path.is_dir():
        states += [inner.stat() for inner in path.rglob("*")]
    return Sighting(path.name, sum(one.st_size for one in states), max(one.st_mtime_ns for one in states))


def _is_data(name: str, pattern: str) -> bool:
    return not name.startswith(".") and fnmatch(name, pattern) and not any(fnmatch(name, one) for one in TEMPORARY)


def seen_again(before: dict[str, Seen], sightings: Iterable[Sighting], now: float) -> dict[str, Seen]:
    """What is known of each file after another look; a change starts its time anew."""
    known: dict[str, Seen] = {}
    for one in sightings:
        earlier = before.get(one.name)
        known[one.name] = earlier if earlier is not None and earlier.sighting == one else Seen(one, now)
    return known


def in_order(seen: Iterable[Seen], order: Order) -> list[Seen]:
    """By name, numbers in it by value (frame9 before frame10), or by time of change."""
    if order == "time":
        return sorted(seen, key=lambda one: (one.sighting.changed_ns, natural(one.sighting.name)))
    return sorted(seen, key=lambda one: natural(one.sighting.name))


def natural(name: str) -> list[tuple[int, int, str]]:
    """Key of a name in which runs of digits count as numbers."""
    parts = re.split(r"(\d+)", name)
    return [(1, int(part), part) if part.isdecimal() else (0, 0, part) for part in parts if part]


def move(path: Path, folder: Path) -> Path:
    """Move a file into a folder of the same file system, under a free name."""
    folder.mkdir(exist_ok=True)
    target, n = folder / path.name, 1
    while target.exists():
        n += 1
        target = folder / f"{path.stem}-{n}{path.suffix}"
    path.rename(target)
    return target
