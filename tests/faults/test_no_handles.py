"""A service without a free file handle refuses for a while, fails no run, and goes on when there are handles again."""

from __future__ import annotations

import os
import resource
import signal
import time
from collections.abc import Callable
from pathlib import Path

import httpx
import numpy as np
import pytest

from streaming import SnapshotStream
from tests.faults.conftest import SECONDS
from tests.service.serving import RunningService, declaration, snapshots

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(SECONDS)]

BATCH = 12
SETTINGS = {"SLACKWATER_MAX_JOURNAL_BYTES": "1024"}


def limit(service: RunningService, spare: int | None) -> None:
    """Leave the process so many handles more than it has, or as many as it likes."""
    in_use = len(os.listdir(f"/proc/{service.process.pid}/fd"))
    hard = resource.prlimit(service.process.pid, resource.RLIMIT_NOFILE)[1]
    soft = min(hard, 4096) if spare is None else min(3, in_use) + spare  # numbers below 3 are always taken
    resource.prlimit(service.process.pid, resource.RLIMIT_NOFILE, (soft, hard))


def test_no_handles(tmp_path: Path, report: Callable[[str], None]) -> None:
    data = tmp_path / "data"
    with RunningService(data, environment=SETTINGS) as service:
        run = service.declare()
        for k in range(3):
            assert service.put(run, k, snapshots(k * BATCH, (k + 1) * BATCH)).status_code == 201
        service.applied(run, 3 * BATCH)
        assert service.put(run, 3, snapshots(3 * BATCH, 4 * BATCH - 5)).status_code == 201
        service.end(signal.SIGKILL)  # so that the next one reads a checkpoint and the journal
    with RunningService(data, environment=SETTINGS) as service:
        refused = 0
        for _ in range(20):
            limit(service, 0)  # again each time: what the start still held may have been given back
            try:
                refused += service.put(run, 4, snapshots(4 * BATCH - 5, 4 * BATCH)).status_code >= 500
            except httpx.TransportError:
                refused += 1
            time.sleep(0.02)
        limit(service, None)
        assert refused > 0
        deadline = time.monotonic() + 30
        while service.put(run, 4, snapshots(4 * BATCH - 5, 4 * BATCH)).status_code not in (200, 201):
            assert time.monotonic() < deadline, service.log[-3000:]
            time.sleep(0.1)
        closed = service.client.post(f"/v1/runs/{run}/close", headers={"Prefer": "wait=30"}).json()
        assert (closed["status"], closed["n_applied"]) == ("closed", 4 * BATCH), (closed, service.log[-3000:])
        direct = SnapshotStream(declaration())
        direct.absorb(snapshots(0, 4 * BATCH))
        direct.close()
        np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/modes?n=2"), direct.modes(2))
        assert not list((data / "runs" / run / "checkpoints").glob("*.damaged-*"))
    report(f"no handle left: {refused} of 20 posts refused, then all went on")
