"""Programs that the demonstration starts, and ends again whatever happens."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import NoReturn

START_SECONDS = 60.0  # a cold start on a slow disk; a warm one takes two
STOP_SECONDS = 20.0  # the service writes its last checkpoint
LOOK_SECONDS = 0.05
TAIL_LINES = 12  # of a log, in an error message
ADDRESS_MARK = "listens on "


class DemoError(Exception):
    """The demonstration cannot go on; the message says what happened and where the log is."""


class Program:
    """A running program of ours: its process and the file that its output goes to."""

    def __init__(self, name: str, process: subprocess.Popen[bytes], log: Path) -> None:
        self.name, self.process, self.log = name, process, log

    @property
    def running(self) -> bool:
        return self.process.poll() is None

    def text(self) -> str:
        """What it has printed so far."""
        return self.log.read_text(errors="replace")

    def check(self) -> None:
        """Raise DemoError when it has ended with an error."""
        code = self.process.poll()
        if code:
            tail = "\n".join(self.text().splitlines()[-TAIL_LINES:])
            raise DemoError(f"the {self.name} ended with code {code}; the end of {self.log}:\n{tail}")

    def end(self) -> None:
        """Ask it to end, wait, and make it end when it does not."""
        if self.running:
            self.process.terminate()
        try:
            self.process.wait(STOP_SECONDS)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait()


@contextmanager
def program(name: str, module: str, arguments: Sequence[str], log: Path) -> Iterator[Program]:
    """Run ``python -m module`` for as long as the context lasts.

    It has a session of its own, so that Ctrl-C reaches only us and we end things in order, and none of the
    settings of another service in its environment.
    """
    environment = {key: value for key, value in os.environ.items() if not key.startswith("SLACKWATER_")}
    with log.open("wb") as out:
        process = subprocess.Popen(
            [sys.executable, "-m", module, *arguments],
            stdin=subprocess.DEVNULL,
            stdout=out,
            stderr=subprocess.STDOUT,
            env=environment,
            start_new_session=True,
        )
    started = Program(name, process, log)
    try:
        yield started
    finally:
        started.end()


def address_of(service: Program) -> str:
    """Wait until the service says where it listens. Raises DemoError when it ends or takes too long."""
    deadline = time.monotonic() + START_SECONDS
    while time.monotonic() < deadline:
        for line in service.text().splitlines():
            if ADDRESS_MARK in line:
                return line.split(ADDRESS_MARK, 1)[1].strip()
        service.check()
        time.sleep(LOOK_SECONDS)
    raise DemoError(f"the {service.name} did not start within {START_SECONDS:g} s; see {service.log}")


@contextmanager
def termination_as_exit() -> Iterator[None]:
    """Let SIGTERM and SIGHUP end us through all ``finally`` clauses, as Ctrl-C does."""

    def leave(number: int, _: FrameType | None) -> NoReturn:
        sys.exit(128 + number)

    signals = (signal.SIGTERM, signal.SIGHUP)
    before = [signal.signal(number, leave) for number in signals]
    try:
        yield
    finally:
        for number, handler in zip(signals, before, strict=True):
            signal.signal(number, handler)
