"""What was last published about each run: small immutable values, read without waiting for the worker."""

from __future__ import annotations

import asyncio
import hashlib
import threading
from dataclasses import dataclass, replace
from typing import Literal

from streaming.report import Convergence, State

Advice = Literal["continue", "may stop"]


@dataclass(frozen=True)
class Published:
    """The last word on a run. ``applied_through`` is the last batch that the engine has taken, or None."""

    applied_through: int | None = None
    n_absorbed: int = 0
    n_applied: int = 0
    report: str | None = None
    verdict: State = State.GATHERING
    snapshots_to_go: dict[str, float | int | None] | None = None

    @property
    def advice(self) -> Advice:
        return "may stop" if self.verdict is State.SETTLED else "continue"

    @property
    def etag(self) -> str:
        return f'"{hashlib.sha256((self.report or "").encode()).hexdigest()[:24]}"'

    def with_report(self, report: Convergence) -> Published:
        to_go = report.verdict.snapshots_to_go
        return replace(
            self,
            report=report.model_dump_json(),
            verdict=report.verdict.state,
            snapshots_to_go=None if to_go is None else to_go.model_dump(exclude={"time"}),
        )


class Board:
    """The published value of every run; set by the worker, read by anyone."""

    def __init__(self, bell: Bell) -> None:
        self._values: dict[str, Published] = {}
        self._bell = bell

    def get(self, run_id: str) -> Published:
        return self._values.get(run_id, Published())

    def put(self, run_id: str, value: Published) -> None:
        self._values[run_id] = value
        self._bell.ring()

    def drop(self, run_id: str) -> None:
        self._values.pop(run_id, None)
        self._bell.ring()


class Bell:
    """Wakes everyone on the event loop who waits for something to change; rung from any thread."""

    def __init__(self) -> None:
        self._lock = threading.RLock()  # a signal handler may ring while the main thread is ringing
        self._loop: asyncio.AbstractEventLoop | None = None
        self._rung = asyncio.Event()
        self._scheduled = False
        self.stopping = asyncio.Event()

    def attach(self, loop: asyncio.AbstractEventLoop) -> None:
        self._loop = loop

    def detach(self) -> None:
        with self._lock:
            self._loop = None

    def ring(self) -> None:
        """Note a change; many rings before the loop comes round count as one."""
        with self._lock:
            if self._loop is not None and not self._scheduled:
                self._scheduled = True
                self._loop.call_soon_threadsafe(self._wake)

    def _wake(self) -> None:
        with self._lock:
            self._scheduled = False
        self._rung.set()
        self._rung = asyncio.Event()

    def stop(self) -> None:
        """End all waits for good: the service is going down."""
        if self._loop is not None:
            self._loop.call_soon_threadsafe(self.stopping.set)
        self.ring()

    def watch(self) -> asyncio.Event:
        """An event that the next ring sets. Take it before looking at what may change, then wait on it."""
        return self._rung

    async def wait(self, rung: asyncio.Event, seconds: float) -> bool:
        """Wait until ``rung``, or the time is over; True when it rang."""
        try:
            async with asyncio.timeout(max(seconds, 0.0)):
                await rung.wait()
        except TimeoutError:
            return False
        return True
