"""How long to go on trying, and how long to pause between tries.

Pauses are drawn from the whole range up to a limit that doubles ("full jitter", Brooker, "Exponential
backoff and jitter", 2015), so that many solvers do not return in step after the service was away.
"""

from __future__ import annotations

import random
import time
from collections.abc import Callable
from typing import TypeVar

from slackwater_client.errors import BusyError, DamagedError, RefusedError, SlackwaterError, UnreachableError

T = TypeVar("T")

FIRST_PAUSE_SECONDS = 0.2  # about the time a restart of the service needs at best
LONGEST_PAUSE_SECONDS = 10.0  # a returning service is noticed within this


def may_pass(error: SlackwaterError) -> bool:
    """True when the same request may succeed later: no answer, busy, full, failed, or damaged on its way."""
    if isinstance(error, UnreachableError | BusyError | DamagedError):
        return True
    return isinstance(error, RefusedError) and error.status >= 500


def pause_seconds(attempt: int, error: SlackwaterError, draw: Callable[[], float] = random.random) -> float:
    """Pause before try ``attempt + 1``, attempts counting from 0; ``draw`` gives a number in [0, 1).

    A stated Retry-After is a floor: the jitter comes on top of it.
    """
    limit = min(LONGEST_PAUSE_SECONDS, FIRST_PAUSE_SECONDS * 2.0 ** min(attempt, 16))
    floor = error.retry_after_seconds if isinstance(error, BusyError) else 0.0
    return floor + limit * draw()


def with_patience(call: Callable[[], T], patience_seconds: float) -> T:
    """Repeat ``call`` while its error may pass, for at most ``patience_seconds``; then raise that error."""
    deadline = time.monotonic() + patience_seconds
    attempt = 0
    while True:
        try:
            return call()
        except SlackwaterError as error:
            pause = pause_seconds(attempt, error)
            if not may_pass(error) or time.monotonic() + pause > deadline:
                raise
        attempt += 1
        time.sleep(pause)
