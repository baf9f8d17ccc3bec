"""Services from the nursery, each with its own fault, as a client sees them."""

from __future__ import annotations

import http.client
import json
import os
import select
import signal
import subprocess
import sys
import time
import uuid
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Self

from tests.faults.shim import Control

ROOT = Path(__file__).parents[2]
END_SECONDS = 20.0
LOG_SHOWN = 2500  # characters of the end of a log beside a failure
# A checkpoint at every block, so that a short record holds several.
SETTINGS = {"SLACKWATER_MAX_JOURNAL_BYTES": "1024", "SLACKWATER_MIN_FREE_BYTES": "0"}


class Nursery:
    """One forking process; give it orders from one thread."""

    def __init__(self, library: Path, folder: Path) -> None:
        self.folder = folder
        clean = {name: value for name, value in os.environ.items() if not name.startswith("SLACKWATER_")}
        self._process = subprocess.Popen(
            [sys.executable, "-m", "tests.faults.nursery"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            cwd=ROOT,
            env={**clean, "LD_PRELOAD": str(library)},
        )

    def order(self, order: Mapping[str, Any]) -> int:
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.write(json.dumps(order).encode() + b"\n")
        self._process.stdin.flush()
        return int(self._process.stdout.readline())

    def start(self, data: Path, control: Control | None = None, **settings: str) -> Forked:
        return Forked(self, data, control, SETTINGS | settings)

    def close(self) -> None:
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.close()
        self._process.wait(10)
        self._process.stdout.close()


@dataclass(frozen=True)
class Answer:
    """Status, headers in lower case, and body."""

    status: int
    headers: dict[str, str]
    body: bytes

    def json(self) -> Any:
        return json.loads(self.body)


class Gone(ConnectionError):
    """The service did not answer; what it did is not known."""


class Forked:
    """A service that may end at any moment; ``url`` is None when it ended before it listened."""

    def __init__(self, nursery: Nursery, data: Path, control: Control | None, settings: Mapping[str, str]) -> None:
        self.data, self.control, self._nursery = data, control, nursery
        self._exit: int | None = None
        self._connection: http.client.HTTPConnection | None = None
        self._log = nursery.folder / f"{uuid.uuid4().hex}.log"
        answers = nursery.folder / f"{uuid.uuid4().hex}.answers"
        os.mkfifo(answers)
        order = {
            "data": str(data),
            "control": "" if control is None else str(control.path),
            "answers": str(answers),
            "log": str(self._log),
            "settings": dict(settings),
        }
        self.pid = nursery.order(order)
        self._gone = os.pidfd_open(self.pid)
        self._said = answers.open("rb")  # kept open: what is printed later must not break a pipe
        first = self._said.readline().decode().split()
        answers.unlink()
        self.port = int(first[-1].rsplit(":", 1)[1]) if first else None

    @property
    def log(self) -> str:
        return self._log.read_text()

    def ask(self, method: str, path: str, body: bytes = b"", seconds: float = 20.0, **headers: str) -> Answer:
        """One request. Raises Gone when no whole answer comes."""
        if self.port is None:
            raise Gone("the service ended before it listened")
        if self._connection is None:
            self._connection = http.client.HTTPConnection("127.0.0.1", self.port, timeout=seconds)
        given = {name.replace("_", "-"): value for name, value in headers.items()}
        try:
            self._connection.request(method, path, body, given)
            answer = self._connection.getresponse()
            fields = {name.lower(): value for name, value in answer.getheaders()}
            return Answer(answer.status, fields, answer.read())
        except (OSError, http.client.HTTPException) as error:
            self._connection.close()
            self._connection = None
            if isinstance(error, TimeoutError):
                raise AssertionError(f"{method} {path} hangs: {self.log[-3000:]}") from error
            raise Gone(f"{method} {path}: {error!r}") from error

    def wait_ready(self, seconds: float = END_SECONDS) -> bool:
        """True when it accepts batches, False when it ended first."""
        deadline = time.monotonic() + seconds
        while time.monotonic() < deadline:
            try:
                if self.ask("GET", "/readyz").status == 200:
                    return True
            except Gone:
                if self.ended(0.0):
                    return False
            time.sleep(0.005)
        raise AssertionError(f"neither ready nor ended: {self.log[-3000:]}")

    def ended(self, seconds: float) -> bool:
        """Whether the process ends within so many seconds."""
        return bool(select.select([self._gone], [], [], seconds)[0])

    def end(self, sig: signal.Signals = signal.SIGTERM, seconds: float = END_SECONDS) -> int:
        """Signal the process, wait, and return its exit status (negative: the signal)."""
        if self._connection is not None:
            self._connection.close()
            self._connection = None
        if self._exit is None:
            if not self.ended(0.0):
                os.kill(self.pid, sig)
            if not self.ended(seconds):
                os.kill(self.pid, signal.SIGKILL)
                raise AssertionError(f"did not end {seconds} s after {sig!r}: {self.log[-3000:]}")
            self._exit = self._nursery.order({"reap": self.pid})
            os.close(self._gone)
            self._said.close()
        return self._exit

    def __enter__(self) -> Self:
        return self

    def __exit__(self, _: object, error: BaseException | None, __: object) -> None:
        if error is not None:
            hit = None if self.control is None else self.control.hit
            error.add_note(f"hit: {hit}; log: {self.log[-LOG_SHOWN:]}")
        if self._exit is None:
            self.end(signal.SIGKILL)
        self._log.unlink(missing_ok=True)
