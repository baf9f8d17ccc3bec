"""The one thread that does linear algebra: takes stored batches in order, a block at a time, runs in turn.

One shared thread and not one for each run: the engine already spreads a block over all cores, so two runs at once
would only get in each other's way; and a turn is one block, so that a long run does not hold up a short one.
"""

from __future__ import annotations

import errno
import logging
import sqlite3
import threading

from service.applier import Applier, Place
from service.journal import JournalError
from service.problems import Problem
from streaming.basis import memory_needed_bytes
from streaming.errors import StreamError

logger = logging.getLogger("slackwater")

# After trouble with the disk: long enough not to spin, short enough that a freed disk is noticed.
BACK_OFF_SECONDS = 5.0


class Worker(threading.Thread):
    """Applies what `wake` announces; ends at `stop`, after the block in hand."""

    def __init__(self, place: Place) -> None:
        super().__init__(name="slackwater-worker", daemon=True)
        self._place = place
        self._condition = threading.Condition()
        self._ready: dict[str, None] = {}  # in order of their turns
        self._forget: set[str] = set()
        self._appliers: dict[str, Applier] = {}
        self._stopping = False

    # -- called by other threads --------------------------------------------------------------------------

    def wake(self, run_id: str) -> None:
        """Say that there may be something to do for a run."""
        with self._condition:
            self._ready.setdefault(run_id)
            self._condition.notify()

    def forget(self, run_id: str) -> None:
        """Drop a deleted run and its folder, once nothing works on it."""
        with self._condition:
            self._forget.add(run_id)
            self._ready.setdefault(run_id)
            self._condition.notify()

    @property
    def n_ready(self) -> int:
        """Runs with something to apply."""
        return len(self._ready)

    def stop(self, seconds: float) -> None:
        """End after the block in hand; what is not applied yet is in the journal."""
        with self._condition:
            self._stopping = True
            self._condition.notify()
        if self.is_alive():
            self.join(seconds)

    # -- the thread ---------------------------------------------------------------------------------------

    def run(self) -> None:
        while (run_id := self._next()) is not None:
            if self._take_forgotten(run_id):
                self._drop(run_id)
            elif self._step(run_id):
                self.wake(run_id)

    def _next(self) -> str | None:
        with self._condition:
            while not self._ready and not self._stopping:
                self._condition.wait()
            if self._stopping:
                return None
            run_id = next(iter(self._ready))
            del self._ready[run_id]
            return run_id

    def _take_forgotten(self, run_id: str) -> bool:
        with self._condition:
            if run_id not in self._forget:
                return False
            self._forget.discard(run_id)
            return True

    def _drop(self, run_id: str) -> None:
        self._appliers.pop(run_id, None)
        self._place.board.drop(run_id)
        try:
            self._place.folders.remove_run(run_id)
        except OSError:
            logger.exception("the folder of deleted run %s could not be removed; it is tried again at start", run_id)

    def _step(self, run_id: str) -> bool:
        """One turn of a run; True when it wants another."""
        try:
            applier = self._appliers.pop(run_id, None) or Applier(run_id, self._place)
            self._appliers[run_id] = applier  # last in the order of use
            if not self._has_room(run_id, memory_needed_bytes(applier.declaration) - applier.memory_bytes):
                return True  # those at work have the memory; this one comes when they rest
            return applier.step()
        except Problem as problem:
            return self._storage_trouble(run_id, problem.detail) if problem.kind != "unknown-run" else False
        except OSError as error:
            if error.errno == errno.EIO:  # the disk itself fails; a full disk or too few handles mend themselves
                self._place.poison.set(f"run {run_id}: {error}")
            return self._storage_trouble(run_id, str(error))
        except sqlite3.OperationalError as error:  # of reading the registry; those of writing are problems
            return self._storage_trouble(run_id, f"the registry could not be read: {error}")
        except (StreamError, JournalError) as error:
            self._fail(run_id, str(error))
        except MemoryError:
            self._fail(run_id, "there is not enough memory for this run; declare a smaller rank or fewer points")
        except Exception as error:
            logger.exception("run %s failed", run_id)
            self._fail(run_id, f"the computation failed ({type(error).__name__}); see the log of the service")
        return False

    def _has_room(self, run_id: str, coming_bytes: int) -> bool:
        """Let go of the runs that have been at rest for longest, as far as the one at work needs their memory.

        A run with something to apply keeps what it has: letting go of it would cost a replay at each of its turns.
        """
        held = coming_bytes + sum(applier.memory_bytes for applier in self._appliers.values())
        for other, applier in self._appliers.items():
            if held <= self._place.settings.memory_bytes:
                break
            if other != run_id and other not in self._ready:
                held -= applier.memory_bytes
                applier.release()
        return coming_bytes == 0 or held == coming_bytes or held <= self._place.settings.memory_bytes

    def _storage_trouble(self, run_id: str, reason: str) -> bool:
        """Start the run over from its last checkpoint once the disk works again; never after a failed sync."""
        logger.error("run %s is held up by the disk: %s", run_id, reason)
        applier = self._appliers.get(run_id)
        if applier is not None:
            applier.release()
        if self._place.poison.reason is not None:
            return False
        with self._condition:
            self._condition.wait_for(lambda: self._stopping, BACK_OFF_SECONDS)
        return True

    def _fail(self, run_id: str, reason: str) -> None:
        logger.error("run %s failed: %s", run_id, reason)
        self._appliers.pop(run_id, None)
        try:
            self._place.registry.set_status(run_id, "failed", reason)
        except Problem:
            logger.exception("the failure of run %s could not be recorded", run_id)
        self._place.board.put(run_id, self._place.board.get(run_id))
