"""The durable list of files and the batch numbers they are bound to; what makes a restart post nothing twice.

A line is on the disk before the first batch of its file is sent. So every line but the last is of a file that is
settled: posted whole, or refused. The last one may be either, or sent in part; posting it again under the same numbers
is harmless, since the service recognises what it has. Moving a file needs no line of its own.
"""

from __future__ import annotations

import fcntl
import json
import os
from collections.abc import Callable
from dataclasses import asdict, dataclass
from pathlib import Path

from service.feeding.folder import Sighting
from service.feeding.variables import FeedError
from streaming.files import sync_directory

NAME = ".slackwater-posted.jsonl"


@dataclass(frozen=True)
class Entry:
    """A file and the number of its first batch."""

    name: str
    n_bytes: int
    changed_ns: int
    sequence: int

    @property
    def sighting(self) -> Sighting:
        return Sighting(self.name, self.n_bytes, self.changed_ns)


class PostedList:
    """The list of one folder, held by one process.

    Raises
    ------
    FeedError
        if another process watches the folder, or the list is damaged
    """

    def __init__(self, folder: Path) -> None:
        self.path = folder / NAME
        self._lock = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            os.close(self._lock)
            raise FeedError(f"{folder} is watched by another process already; end that one first") from error
        self._file = self.path.open("a+b")
        try:
            self.run_id, self._entries = self._read()
        except FeedError:
            self.close()
            raise
        self._sightings = {one.sighting for one in self._entries}

    def close(self) -> None:
        """Let go of the folder."""
        self._file.close()
        os.close(self._lock)

    def bind(self, run_id: str) -> None:
        """Say which run the folder belongs to."""
        self.run_id = run_id
        self._append({"run": run_id})

    def add(self, entry: Entry) -> None:
        """Bind a file to a batch number, durably."""
        self._append(asdict(entry))
        self._entries.append(entry)
        self._sightings.add(entry.sighting)

    def last(self) -> Entry | None:
        """The file that may be sent in part."""
        return self._entries[-1] if self._entries else None

    def is_settled(self, sighting: Sighting) -> bool:
        """True when this very file is listed, and a later one too."""
        return sighting in self._sightings and self._entries[-1].sighting != sighting

    def drop(self, name: str) -> None:
        """Forget a file that was moved away: another of this name is another file, whatever its size and time."""
        self._entries = [one for one in self._entries if one.name != name]
        self._sightings = {one.sighting for one in self._entries}

    def tidy(self, gone: Callable[[Entry], bool]) -> None:
        """Rewrite the list without the lines of files that are gone, so that it does not grow for ever."""
        kept = [one for one in self._entries if not gone(one)]
        if len(kept) == len(self._entries):
            return
        sync_directory(self.path.parent)  # the files must be gone for good before their lines are
        lines = [json.dumps({"run": self.run_id}), *(json.dumps(asdict(one)) for one in kept)]
        partial = self.path.with_name(f"{NAME}.partial")
        with partial.open("wb") as file:
            file.write("".join(f"{line}\n" for line in lines).encode())
            file.flush()
            os.fsync(file.fileno())
        partial.rename(self.path)
        sync_directory(self.path.parent)
        self._file.close()
        self._file = self.path.open("a+b")
        self._entries, self._sightings = kept, {one.sighting for one in kept}

    def _append(self, line: dict[str, object]) -> None:
        self._file.write(f"{json.dumps(line)}\n".encode())
        self._file.flush()
        os.fsync(self._file.fileno())

    def _read(self) -> tuple[str | None, list[Entry]]:
        """Run and entries; a torn last line was never relied on and is cut off."""
        self._file.seek(0)
        raw = self._file.read()
        whole = raw[: raw.rfind(b"\n") + 1]
        if len(whole) < len(raw):
            self._file.truncate(len(whole))
        run_id, entries = None, []
        try:
            for line in whole.splitlines():
                members = json.loads(line)
                if "run" in members:
                    run_id = str(members["run"])
                else:
                    entries.append(Entry(**members))
        except (ValueError, TypeError) as error:
            raise FeedError(
                f"{self.path} is damaged: {error}; without it nobody can tell which files were posted. Compare the "
                "folder with the run, move what was posted away, and delete the list"
            ) from error
        return run_id, entries
