"""A real service in a process of its own, and snapshots to send to it."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import numpy.typing as npt
import pytest

from slackwater_client import Client

START_SECONDS = 30.0
STOP_SECONDS = 10.0
N_POINTS = 60


class Service:
    """The service on a port and a data directory of its own; it can be killed and started again."""

    def __init__(self, data_directory: Path, **environment: str) -> None:
        self.data_directory = data_directory
        self._environment = environment
        with socket.socket() as taken:
            taken.bind(("127.0.0.1", 0))
            self.port = int(taken.getsockname()[1])
        self.url = f"http://127.0.0.1:{self.port}"
        self._log = data_directory.with_suffix(".log")
        self._process: subprocess.Popen[bytes] | None = None

    def start(self, wait: bool = True) -> None:
        command = [sys.executable, "-m", "service", "serve", "--host", "127.0.0.1", "--port", str(self.port)]
        clean = {name: value for name, value in os.environ.items() if not name.startswith("SLACKWATER_")}
        with self._log.open("ab") as log:
            self._process = subprocess.Popen(
                [*command, "--data-directory", str(self.data_directory)],
                stdout=log,
                stderr=log,
                env={**clean, **self._environment},
            )
        if wait:
            self.wait_until_ready()

    def wait_until_ready(self) -> None:
        assert self._process is not None
        deadline = time.monotonic() + START_SECONDS
        while time.monotonic() < deadline and self._process.poll() is None:
            try:
                if httpx.get(f"{self.url}/readyz", trust_env=False).status_code == 200:
                    return
            except httpx.TransportError:
                pass
            time.sleep(0.05)
        raise AssertionError(f"the service did not start:\n{self._log.read_text()}")

    @property
    def running(self) -> bool:
        return self._process is not None and self._process.poll() is None

    def freeze(self) -> None:
        """As a stalled disk or a swapped-out process would: connections open, nobody answers."""
        assert self._process is not None
        self._process.send_signal(signal.SIGSTOP)

    def thaw(self) -> None:
        assert self._process is not None
        self._process.send_signal(signal.SIGCONT)

    def kill(self) -> None:
        """As a power switch would: no time to clean up."""
        self._end(signal.SIGKILL)

    def stop(self) -> None:
        self._end(signal.SIGTERM)

    def _end(self, number: signal.Signals) -> None:
        process, self._process = self._process, None
        if process is None:
            return
        process.send_signal(number)
        try:
            process.wait(STOP_SECONDS)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait(STOP_SECONDS)
            raise


@pytest.fixture(scope="session")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    """A service shared by the tests that do not disturb it."""
    shared = Service(tmp_path_factory.mktemp("shared") / "data")
    shared.start()
    yield shared
    shared.stop()


@pytest.fixture(scope="session")
def _mortal(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    mortal = Service(tmp_path_factory.mktemp("mortal") / "data")
    yield mortal
    mortal.stop()


@pytest.fixture
def mortal_service(_mortal: Service) -> Service:
    """A running service that the test may kill or freeze; one process serves all such tests until it is killed."""
    if not _mortal.running:
        _mortal.start()
    _mortal.wait_until_ready()
    return _mortal


@pytest.fixture
def client(service: Service) -> Iterator[Client]:
    with Client(service.url) as connected:
        yield connected


@pytest.fixture
def declaration() -> dict[str, Any]:
    """Two fields in a mixing duct, 6 x 10 points; two modes wanted out of eight kept."""
    return {
        "name": "mixing duct",
        "n_points": N_POINTS,
        "fields": [{"name": "u", "unit": "m/s"}, {"name": "v", "unit": "m/s"}],
        "grid": {"kind": "uniform", "shape": [6, 10], "spacing": [0.01, 0.01]},
        "time": {"unit": "s", "step": 0.5},
        "retained_rank": 8,
        "block_length": 16,
        "criterion": {"n_modes": 2, "max_angle_deg": 10},
    }


@pytest.fixture
def make_snapshots() -> Callable[..., npt.NDArray[np.float32]]:
    """Snapshots (n, 2, 60) of two patterns with independent strengths 3 : 1 and a little noise."""

    def make(n: int, seed: int = 11) -> npt.NDArray[np.float32]:
        patterns = np.random.default_rng(3).normal(size=(2, 2, N_POINTS))
        rng = np.random.default_rng(seed)
        strengths = rng.normal(size=(n, 2)) * [3.0, 1.0]
        noise = 0.05 * rng.normal(size=(n, 2, N_POINTS))
        return (np.tensordot(strengths, patterns, 1) + noise + 2.0).astype(np.float32)

    return make
