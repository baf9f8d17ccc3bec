"""The background half of a hook: a bounded queue in memory and the thread that empties it.

Batches are numbered when they are sent, so a batch that the service refuses leaves no gap in the numbers. A
batch whose fate is unknown is sent again under its number until the service answers. One part of a run among several
cannot close up like this, since its batches must stay beside those of the other parts: it stops at the first loss.
"""

from __future__ import annotations

import logging
import threading
import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from enum import Enum

import numpy as np
import numpy.typing as npt

from slackwater_client.answers import Receipt
from slackwater_client.errors import InvalidError, SlackwaterError
from slackwater_client.patience import may_pass, pause_seconds

log = logging.getLogger("slackwater_client")


@dataclass(frozen=True)
class Batch:
    """Snapshots (n, n_fields, n_points) and their times (n,), or None when the declared step holds."""

    snapshots: npt.NDArray[np.float32] | npt.NDArray[np.float64]
    times: tuple[float, ...] | None

    def __len__(self) -> int:
        return len(self.snapshots)


class Next(Enum):
    """What to do after a failed try."""

    AGAIN = "try the same batch again"
    SKIP = "give this batch up and go on with the next"
    STOP = "send nothing more"


def after_failure(error: SlackwaterError, stops_at_loss: bool = False) -> Next:
    """Decide what a failed try means."""
    if may_pass(error):
        return Next.AGAIN
    return Next.SKIP if isinstance(error, InvalidError) and not stops_at_loss else Next.STOP


class Outbox:
    """Queue of batches and the thread that posts them in order.

    Parameters
    ----------
    post : sends a batch under a number and gives its receipt
    first_sequence : asks the service for the first number
    max_waiting_bytes : bound on the snapshots that wait in memory, the one being sent included
    patience_seconds : how long without contact until `out_of_patience`; tries go on after it
    stops_at_loss : send nothing more once a batch was refused or found no room
    """

    def __init__(
        self,
        post: Callable[[Batch, int], Receipt],
        first_sequence: Callable[[], int],
        max_waiting_bytes: int,
        patience_seconds: float,
        stops_at_loss: bool = False,
    ) -> None:
        self._post, self._first_sequence = post, first_sequence
        self._max_waiting_bytes = max_waiting_bytes
        self._patience_seconds = patience_seconds
        self._stops_at_loss = stops_at_loss
        self._shut = False  # after a loss that nothing may follow
        self._waiting: deque[Batch] = deque()
        self._waiting_bytes = 0
        self._changed = threading.Condition()
        self._ended = False
        self._failing_since: float | None = None
        self.receipt: Receipt | None = None
        self.last_error: SlackwaterError | None = None
        self.stopped = False
        self.sent_snapshots = 0
        self.lost_snapshots = 0
        self._thread = threading.Thread(target=self._work, name="slackwater-hook", daemon=True)
        self._thread.start()

    @property
    def in_contact(self) -> bool:
        """False from the first failed try until the next receipt."""
        return not self.stopped and self._failing_since is None

    @property
    def out_of_patience(self) -> bool:
        since = self._failing_since
        return self.stopped or (since is not None and time.monotonic() - since > self._patience_seconds)

    @property
    def unsent_snapshots(self) -> int:
        """Snapshots that still wait; the fate of the first batch among them may be unknown."""
        with self._changed:
            return sum(map(len, self._waiting))

    def offer(self, batch: Batch, hold_seconds: float) -> bool:
        """Queue a batch; False, and the batch is lost, when there is no room within ``hold_seconds``."""
        with self._changed:
            room = not self._shut and self._changed.wait_for(
                lambda: self.stopped or self._has_room(batch), hold_seconds
            )
            if self.stopped or not room:
                self._lose(batch)
                return False
            self._waiting.append(batch)
            self._waiting_bytes += batch.snapshots.nbytes
            self._changed.notify_all()
            return True

    def _lose(self, batch: Batch) -> None:
        """Count a batch that found no room; what waits before it is still sent."""
        self.lost_snapshots += len(batch)
        if self._stops_at_loss and not self._shut:
            self._shut = True
            log.warning("no room for a batch of %d snapshots; nothing is sent after what waits now", len(batch))

    def finish(self, flush_seconds: float) -> None:
        """Wait until all is sent, for at most ``flush_seconds``, and end the thread."""
        with self._changed:
            self._changed.wait_for(lambda: not self._waiting, flush_seconds)
            self._ended = True
            self._changed.notify_all()
        self._thread.join(timeout=1.0)  # a request in the air may outlast this; the thread is a daemon

    def _has_room(self, batch: Batch) -> bool:
        # one batch is always let in, so that a bound below the size of a batch slows down and does not block
        return not self._waiting or self._waiting_bytes + batch.snapshots.nbytes <= self._max_waiting_bytes

    def _work(self) -> None:
        sequence: int | None = None
        attempt = 0
        while (batch := self._head()) is not None:
            try:
                sequence = self._first_sequence() if sequence is None else sequence
                receipt = self._post(batch, sequence)
            except SlackwaterError as error:
                attempt = self._failed(batch, error, attempt)
            except Exception as error:
                if self._ended:  # the client was closed under a request that outlasted the flush
                    return
                # a fault of this package must not end in silence
                log.exception("posting failed in an unforeseen way; nothing more is sent")
                self._stop(SlackwaterError(f"posting failed in an unforeseen way: {error!r}"))
            else:
                sequence, attempt = sequence + 1, 0
                self._succeeded(batch, receipt)

    def _head(self) -> Batch | None:
        """The batch to send now; waits for one; None when the outbox has ended."""
        with self._changed:
            self._changed.wait_for(lambda: self._waiting or self._ended or self.stopped)
            return None if self._ended or self.stopped else self._waiting[0]

    def _succeeded(self, batch: Batch, receipt: Receipt) -> None:
        if self._failing_since is not None:
            log.warning("the service answers again after %.0f s", time.monotonic() - self._failing_since)
        with self._changed:
            self.receipt, self._failing_since = receipt, None
            self.sent_snapshots += len(batch)
            self._remove_head()

    def _failed(self, batch: Batch, error: SlackwaterError, attempt: int) -> int:
        """Act on a failed try and give the number of the next one."""
        self.last_error = error
        step = after_failure(error, self._stops_at_loss)
        if step is Next.STOP:
            log.warning("nothing more is sent: %s", error)
            self._stop(error)
        elif step is Next.SKIP:
            log.warning("a batch of %d snapshots was refused and is lost: %s", len(batch), error)
            with self._changed:
                self._failing_since = None  # a refusal is an answer
                self.lost_snapshots += len(batch)
                self._remove_head()
        else:
            self._pause(error, attempt)
            return attempt + 1
        return 0

    def _pause(self, error: SlackwaterError, attempt: int) -> None:
        if self._failing_since is None:
            self._failing_since = time.monotonic()
            log.warning("snapshots wait in memory while the service cannot take them: %s", error)
        with self._changed:
            self._changed.wait_for(lambda: self._ended, pause_seconds(attempt, error))

    def _stop(self, error: SlackwaterError) -> None:
        with self._changed:
            self.last_error, self.stopped = error, True
            self.lost_snapshots += sum(map(len, self._waiting))
            self._waiting.clear()
            self._waiting_bytes = 0
            self._changed.notify_all()

    def _remove_head(self) -> None:
        self._waiting_bytes -= self._waiting.popleft().snapshots.nbytes
        self._changed.notify_all()
