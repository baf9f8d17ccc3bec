"""A post that breaks off after any number of its bytes stores nothing, leaves nothing, and is never answered 5xx."""

from __future__ import annotations

import socket
import struct
import time
from collections import Counter
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest

from tests.faults.conftest import SECONDS
from tests.service.serving import RunningService, npy

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(SECONDS)]

MEMORY_GROWTH_BYTES = 64 * 2**20
RESET = struct.pack("ii", 1, 0)  # SO_LINGER: close with a reset instead of an end


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningService]:
    with RunningService(tmp_path_factory.mktemp("torn") / "data") as running:
        yield running
        assert "Traceback" not in running.log, running.log


def peak_memory_bytes(service: RunningService) -> int:
    status = Path(f"/proc/{service.process.pid}/status").read_text()
    return next(int(line.split()[1]) * 1024 for line in status.splitlines() if line.startswith("VmHWM"))


def send(service: RunningService, request: bytes, ending: str) -> int | None:
    """Send these bytes and end; return the status of the answer, None without one."""
    host, port = service.url.removeprefix("http://").split(":")
    with socket.create_connection((host, int(port)), timeout=10) as connection:
        connection.sendall(request)
        if ending == "reset":
            connection.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, RESET)
            return None
        if ending == "end":
            connection.shutdown(socket.SHUT_WR)
        answer = connection.recv(65536)
        return int(answer.split()[1]) if answer else None


def no_drafts(service: RunningService, run: str) -> dict[str, object]:
    deadline = time.monotonic() + 10
    while any(name.endswith(".part") for name in service.disk(run)["files"]):
        assert time.monotonic() < deadline, "a draft stays behind"
        time.sleep(0.02)
    return service.disk(run)


def post_whole(service: RunningService, request: bytes) -> None:
    """Post it whole, when the bodies that were torn have given up their places."""
    deadline = time.monotonic() + 10
    while (status := send(service, request, "whole")) != 201:
        assert status == 429
        assert time.monotonic() < deadline
        time.sleep(0.05)


@pytest.mark.parametrize("ending", ["end", "reset"])
def test_torn_at_every_byte(service: RunningService, ending: str, report: Callable[[str], None]) -> None:
    small = {"n_points": 2, "grid": {"kind": "none"}, "retained_rank": 2, "criterion": {"n_modes": 1}}
    run, other = service.declare(**small), service.declare(**small)
    body = npy(np.ones((3, 2, 2), np.float32))
    head = f"PUT /v1/runs/{run}/batches/0 HTTP/1.1\r\nHost: 127.0.0.1\r\nContent-Length: {len(body)}\r\n"
    request = head.encode() + b"Content-Type: application/x-npy\r\n\r\n" + body
    before, memory = service.disk(run), peak_memory_bytes(service)
    statuses = Counter(send(service, request[:cut], ending) for cut in range(len(request)))
    post_whole(service, request.replace(run.encode(), other.encode()))  # by now all that was torn has been seen
    assert no_drafts(service, run) == before
    assert all(status is None or 400 <= status < 500 for status in statuses), statuses
    assert peak_memory_bytes(service) - memory < MEMORY_GROWTH_BYTES
    post_whole(service, request)
    assert len(service.disk(run)["rows"]) == 1
    answered = ", ".join(f"{n} answered {status or 'nothing'}" for status, n in sorted(statuses.items(), key=str))
    report(f"torn after each of {len(request)} bytes, closed with {ending}: {answered}")
