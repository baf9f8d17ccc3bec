"""Waiting for something to change, bounded in time and number, and over at once when the service stops."""

from __future__ import annotations

import re
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from service.core import Service
from service.problems import Problem

MAX_WAIT_SECONDS = 60.0
_PREFERENCE = re.compile(r"(?:^|[,;\s])wait=(\d{1,4})\b")


def preferred_wait_seconds(prefer: str | None) -> float:
    """Seconds in ``Prefer: wait=N`` (RFC 7240), at most MAX_WAIT_SECONDS; 0 without it."""
    match = _PREFERENCE.search(prefer or "")
    return min(float(match[1]), MAX_WAIT_SECONDS) if match else 0.0


async def wait_until(service: Service, reached: Callable[[], bool], seconds: float) -> bool:
    """Wait until ``reached()``, which is asked again at every change; False when the time was over."""
    deadline = time.monotonic() + min(seconds, MAX_WAIT_SECONDS)
    rung = service.bell.watch()
    if reached() or seconds <= 0:
        return reached()
    with _place(service):
        while not service.bell.stopping.is_set():
            if not await service.bell.wait(rung, deadline - time.monotonic()):
                return reached()
            rung = service.bell.watch()
            if reached():
                return True
    return False


@contextmanager
def _place(service: Service) -> Iterator[None]:
    if service.n_waits >= service.settings.max_waits:
        raise Problem(
            "stopping",
            f"{service.n_waits} requests are waiting, which is the limit; ask without waiting",
            retry_after_seconds=5,
        )
    service.n_waits += 1
    try:
        yield
    finally:
        service.n_waits -= 1
