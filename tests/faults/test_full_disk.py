"""A disk that really fills: refused with 507 and a time to come back, readable throughout, and healed by itself."""

from __future__ import annotations

import os
import subprocess
import time
from collections.abc import Callable, Iterator
from contextlib import suppress
from pathlib import Path

import httpx
import numpy as np
import pytest

from streaming import SnapshotStream
from tests.faults.conftest import SECONDS
from tests.service.serving import RunningService, check_problem, declaration, snapshots

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(SECONDS)]

SIZE = "6m"
BATCH = 24
SETTINGS = {"SLACKWATER_MIN_FREE_BYTES": "0", "SLACKWATER_MAX_JOURNAL_BYTES": "1024"}


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of a few megabytes, kept in memory."""
    if os.geteuid() != 0:
        pytest.skip("NO DISK WAS FILLED: mounting a small file system needs root")
    place = tmp_path / "disk"
    place.mkdir()
    mounted = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={SIZE}", "tmpfs", str(place)], capture_output=True, text=True, check=False
    )
    if mounted.returncode:
        pytest.skip(f"NO DISK WAS FILLED: mount failed: {mounted.stderr.strip()}")
    yield place
    subprocess.run(["umount", "--lazy", str(place)], check=True)


def fill(place: Path, leave_bytes: int) -> Path:
    """Take all room but so much, as another program would."""
    ballast = place / "ballast"
    with ballast.open("wb", buffering=0) as file, suppress(OSError):  # the service writes too
        while (room := free_bytes(place)) > leave_bytes:
            file.write(bytes(min(room - leave_bytes, 2**16)))
    return ballast


def free_bytes(place: Path) -> int:
    room = os.statvfs(place)
    return room.f_bavail * room.f_frsize


def put(service: RunningService, run: str, k: int) -> httpx.Response:
    return service.put(run, k, snapshots(k * BATCH, (k + 1) * BATCH))


@pytest.mark.parametrize("leave_bytes", [0, 30_000, 200_000])
def test_a_disk_fills_and_heals(small_disk: Path, leave_bytes: int, report: Callable[[str], None]) -> None:
    """With room for nothing, for a batch but no checkpoint, and for a few of both."""
    refused = busy = 0
    with RunningService(small_disk / "data", environment=SETTINGS) as service:
        run = service.declare()
        assert put(service, run, 0).status_code == 201
        service.applied(run, BATCH)
        ballast = fill(small_disk, leave_bytes)
        sequence = 1
        for _ in range(30):
            answer = put(service, run, sequence)
            if answer.status_code == 201:
                sequence += 1
            elif answer.status_code == 429:  # taken, but no checkpoint covers what waits
                check_problem(answer, 429, "busy")
                busy += 1
            else:
                check_problem(answer, 507, "disk-full")
                refused += 1
            assert service.client.get(f"/v1/runs/{run}").json()["next_sequence"] == sequence
            assert service.client.get(f"/v1/runs/{run}/convergence").status_code == 200
            time.sleep(0.02)
        assert refused + busy > 0
        assert service.client.get("/readyz").status_code == 200
        ballast.unlink()
        took = healed(service, run, sequence)
        for k in range(sequence + 1, sequence + 3):
            healed(service, run, k)
        n = (sequence + 3) * BATCH
        closed = service.client.post(f"/v1/runs/{run}/close", headers={"Prefer": "wait=30"}).json()
        assert (closed["status"], closed["n_applied"]) == ("closed", n)
        direct = SnapshotStream(declaration())
        direct.absorb(snapshots(0, n))
        direct.close()
        np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/modes?n=2"), direct.modes(2))
        assert "Traceback" not in service.log, service.log
    report(f"disk with {leave_bytes} bytes left: {refused} refused with 507, {busy} with 429, healed in {took:.2f} s")


def healed(service: RunningService, run: str, sequence: int) -> float:
    """Seconds until the batch is taken."""
    began = time.monotonic()
    while put(service, run, sequence).status_code != 201:
        assert time.monotonic() - began < 20
        time.sleep(0.05)
    return time.monotonic() - began
