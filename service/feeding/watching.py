"""A folder posted file by file as a rig writes it: each snapshot once, whatever ends in between."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from service.feeding.choice import Choice
from service.feeding.folder import DONE, MARK, REFUSED, Order, Seen, Sighting, in_order, look, move, seen_again, sight
from service.feeding.posted_list import Entry, PostedList
from service.feeding.series import Piece, Series, plan
from service.feeding.variables import FeedError
from slackwater_client import ConflictError, InvalidError, Receipt, Run
from streaming.declaration import RunDeclaration

Tell = Callable[[str], None]


@dataclass(frozen=True)
class Manner:
    """How a folder is watched.

    Attributes
    ----------
    settle_seconds : a file is taken when it has not changed for so long
    give_up_seconds : a file that cannot be read is refused when it has not changed for so long
    mark : leave files where they are and put a mark beside them, instead of moving them
    """

    pattern: str = "*"
    order: Order = "name"
    settle_seconds: float = 2.0
    give_up_seconds: float = 60.0
    mark: bool = False
    max_batch_bytes: int = 32 * 2**20
    patience_seconds: float = float("inf")


class Watcher:
    """Posts the files of one folder to one run.

    Parameters
    ----------
    find_run : gives the run for the first file; called once, when the folder is not bound to one yet
    """

    def __init__(
        self, folder: Path, choice: Choice, manner: Manner, find_run: Callable[[Path], Run], tell: Tell
    ) -> None:
        self.folder, self.manner = folder, manner
        self._choice, self._find_run, self._tell = choice, find_run, tell
        self.run: Run | None = None
        self.list = PostedList(folder)
        self._known: dict[str, Seen] = {}
        self.receipt: Receipt | None = None
        self._in_sight = True
        self._last_news = time.monotonic()
        self.list.tidy(lambda one: not (folder / one.name).exists())

    def resume(self, run_of: Callable[[str], Run]) -> None:
        """Take up the run that the folder is bound to, if any."""
        if self.list.run_id is not None:
            self.run = run_of(self.list.run_id)

    @property
    def may_stop(self) -> bool:
        return self.receipt is not None and self.receipt.advice == "may stop"

    @property
    def idle_seconds(self) -> float:
        """How long nothing has come; zero while a file waits to be whole."""
        return 0.0 if self._known or not self._in_sight else time.monotonic() - self._last_news

    def poll(self, ended: Callable[[], bool] = lambda: False) -> None:
        """Look once, and post all files that are whole, in order; one that is not holds back those behind it."""
        now = time.monotonic()
        before = self._known
        try:
            sightings = look(self.folder, self.manner.pattern)
        except OSError as error:  # a network drive that is away for a moment
            if self._in_sight:
                self._tell(f"{self.folder} cannot be read, and is tried again: {error}")
            self._in_sight = False
            return
        self._in_sight = True
        self._known = seen_again(before, self._open_ones(sightings), now)
        if self._known != before:
            self._last_news = now
        for one in in_order(self._known.values(), self.manner.order):
            if time.monotonic() - one.since < self.manner.settle_seconds or not self._take(one):
                return
            self._last_news = time.monotonic()
            if ended():
                return

    def _open_ones(self, sightings: list[Sighting]) -> Iterator[Sighting]:
        """Files that are not dealt with; those left over from a process that was killed are put away."""
        for one in sightings:
            if (self.folder / f"{one.name}{MARK}").exists() and self.manner.mark:
                continue
            if self.list.is_settled(one):
                self._put_away(self.folder / one.name)
            else:
                yield one

    def _take(self, seen: Seen) -> bool:
        """Post one file; False when it must wait."""
        path = self.folder / seen.sighting.name
        try:
            self.run = self.run or self._bound_run(path)
            series, pieces = self._read(path)
            if sight(path) != seen.sighting:
                return False
            self._post(seen.sighting, series, pieces)
            self._put_away(path)
        except FileNotFoundError:
            return True  # taken away by somebody in the meantime
        except (FeedError, InvalidError) as error:
            if not path.exists():
                return True
            if isinstance(error, FeedError) and time.monotonic() - seen.since < self.manner.give_up_seconds:
                return False  # perhaps the rig only pauses
            self._refuse(path, str(error))
        self._known.pop(seen.sighting.name, None)
        return True

    def _bound_run(self, path: Path) -> Run:
        try:
            run = self._find_run(path)
        except InvalidError as error:  # not the fault of the file: ends the watch
            raise ValueError(f"the run could not be declared: {error}") from error
        self.list.bind(run.id)
        return run

    def _read(self, path: Path) -> tuple[Series, list[Piece] | None]:
        """Look through the whole file, so that none is posted by halves; a small one is kept. Raises FeedError."""
        assert self.run is not None
        series = plan([path], self._choice, RunDeclaration.model_validate(self.run.declaration))
        first: Piece | None = None
        for piece in series.pieces(0, self.manner.max_batch_bytes):
            finite = np.isfinite(piece.snapshots).reshape(len(piece.snapshots), -1).all(axis=1)
            if not finite.all():
                number = piece.first + int(np.flatnonzero(~finite)[0])
                raise FeedError(f"{path.name}: snapshot {number} holds NaN or infinite values")
            first = piece if piece.first == 0 else None
        return series, [first] if first is not None else None

    def _post(self, sighting: Sighting, series: Series, pieces: list[Piece] | None) -> None:
        """Bind the file to batch numbers, and send it under these."""
        assert self.run is not None
        last = self.list.last()
        if last is not None and last.sighting == sighting:
            sequence = last.sequence  # bound before this process started; what was stored is recognised
        else:
            sequence = self.run.next_sequence if self.receipt is None else self.receipt.sequence + 1
            self.list.add(Entry(sighting.name, sighting.n_bytes, sighting.changed_ns, sequence))
        for k, piece in enumerate(pieces or series.pieces(0, self.manner.max_batch_bytes)):
            self.receipt = self._send(piece, sequence + k)
        self._tell(f"{sighting.name}: {series.n_snapshots} snapshots, {self._words()}")

    def _send(self, piece: Piece, sequence: int) -> Receipt:
        assert self.run is not None
        try:
            return self.run.post(piece.snapshots, sequence, piece.times, patience_seconds=self.manner.patience_seconds)
        except ConflictError as error:
            if error.problem_type != "/problems/sequence-conflict":
                raise
            raise ValueError(
                f"batch {sequence} of run {self.run.id} is not of this folder: another program posts to the run, or a "
                f"file was changed after it was posted in part. Give each folder a run of its own ({error})"
            ) from error

    def _words(self) -> str:
        assert self.receipt is not None
        forecast = self.receipt.snapshots_to_go
        return self.receipt.verdict + (f", about {forecast.estimate:,} to go" if forecast else "")

    def _put_away(self, path: Path) -> None:
        """Move a posted file to the folder ``done``, or mark it."""
        if self.manner.mark:
            path.with_name(f"{path.name}{MARK}").touch()
        else:
            move(path, self.folder / DONE)
            self.list.drop(path.name)

    def _refuse(self, path: Path, reason: str) -> None:
        """Move a file to the folder ``refused`` and say why beside it; the watch goes on."""
        target = move(path, self.folder / REFUSED)
        self.list.drop(path.name)
        target.with_name(f"{target.name}.txt").write_text(f"{reason}\n")
        self._tell(f"{path.name}: refused: {reason}")
