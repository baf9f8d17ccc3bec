"""The real command under load, killed again and again: every receipt holds, and each run has the bits of its data."""

from __future__ import annotations

import random
import signal
import threading
import time
from collections import Counter
from collections.abc import Callable, Iterator
from itertools import pairwise
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from streaming import SnapshotStream
from tests.faults.conftest import FACTOR, SECONDS, SEED
from tests.faults.points import scratch
from tests.service.serving import NPY, RunningService, declaration, npy, snapshots

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(SECONDS)]

N_ROUNDS = 10 * FACTOR
N_BATCHES = 100 * FACTOR  # enough that the posters are still at it when the last round ends
BATCH = 5
BOUNDS = (0, 13, 24, 25, 48)
PARTS = [{"start": a, "stop": b} for a, b in pairwise(BOUNDS)]
SETTINGS = {"SLACKWATER_MAX_JOURNAL_BYTES": "65536"}  # a checkpoint after each sixteen kilobytes


class Poster(threading.Thread):
    """Posts its share of a run whatever happens to the service, and keeps the receipts."""

    def __init__(self, address: Callable[[], str], paths: list[tuple[str, bytes]]) -> None:
        super().__init__(daemon=True)
        self._address, self._paths = address, paths
        self._client = httpx.Client(timeout=10.0)
        self.receipts: list[str] = []
        self.statuses: Counter[int | str] = Counter()
        self.wrong: list[str] = []
        self.stopping = False

    def run(self) -> None:
        with self._client:
            self._post_all()

    def _post_all(self) -> None:
        for path, body in self._paths:
            while not self.stopping and not self._post(path, body):
                time.sleep(0.25)  # asked too often, the service has no time to apply

    def _post(self, path: str, body: bytes) -> bool:
        try:
            answer = self._client.put(self._address() + path, content=body, headers=NPY)
        except httpx.TransportError as error:
            self.statuses[type(error).__name__] += 1
            return False
        self.statuses[answer.status_code] += 1
        if answer.status_code in (200, 201):
            self.receipts.append(path)
            return True
        if answer.status_code not in (429, 503):
            self.wrong.append(f"{path}: {answer.status_code} {answer.text[:200]}")
            self.stopping = True
        return False


def whole(run: str, mine: int, of: int) -> list[tuple[str, bytes]]:
    """Every so-many-th batch, so that the batches of several posters come in any order."""
    return [
        (f"/v1/runs/{run}/batches/{k}", npy(snapshots(k * BATCH, (k + 1) * BATCH))) for k in range(mine, N_BATCHES, of)
    ]


def part(run: str, number: int) -> list[tuple[str, bytes]]:
    points = slice(BOUNDS[number], BOUNDS[number + 1])
    return [
        (f"/v1/runs/{run}/parts/{number}/batches/{k}", npy(snapshots(k * BATCH, (k + 1) * BATCH)[:, :, points]))
        for k in range(N_BATCHES)
    ]


@pytest.fixture
def data() -> Iterator[Path]:
    with scratch() as folder:
        yield folder / "data"


def test_killed_under_load(data: Path, report: Callable[[str], None]) -> None:
    rng = random.Random(SEED)
    where = {"url": "http://127.0.0.1:1"}
    with RunningService(data, environment=SETTINGS) as service:
        runs = [service.declare(), service.declare(parts=PARTS)]
        service.end(signal.SIGKILL)
    shares = [*(whole(runs[0], k, 2) for k in range(2)), *(part(runs[1], k) for k in range(4))]
    posters = [Poster(lambda: where["url"], paths) for paths in shares]
    for poster in posters:
        poster.start()
    under_load = 0
    for _ in range(N_ROUNDS):
        with RunningService(data, environment=SETTINGS) as service:
            where["url"] = service.url
            time.sleep(rng.uniform(0.05, 0.6))
            under_load += any(poster.is_alive() for poster in posters)
            service.end(signal.SIGKILL)
            assert "Traceback" not in service.log, service.log
    with RunningService(data, environment=SETTINGS) as service:
        where["url"] = service.url
        for poster in posters:
            poster.join(120)
        assert not any(poster.is_alive() for poster in posters)
        check_posters(service, posters, shares)
        for run in runs:
            check_run(service, run)
        assert "Traceback" not in service.log, service.log
    statuses = sum((poster.statuses for poster in posters), Counter())
    report(
        f"killed {N_ROUNDS} times under {len(posters)} posters ({under_load} times while they posted): "
        + ", ".join(f"{n} {name}" for name, n in sorted(statuses.items(), key=str))
    )


def check_posters(service: RunningService, posters: list[Poster], shares: list[list[tuple[str, bytes]]]) -> None:
    """Nothing but repeats is left to send: every receipt holds."""
    for poster, share in zip(posters, shares, strict=True):
        assert poster.wrong == []
        assert len(poster.receipts) == len(share)
        for path, body in share:
            answer = service.client.put(path, content=body, headers=NPY)
            assert (answer.status_code, answer.json()["duplicate"]) == (200, True), (path, answer.text)


def check_run(service: RunningService, run: str) -> None:
    closed: dict[str, Any] = service.client.post(f"/v1/runs/{run}/close", headers={"Prefer": "wait=60"}).json()
    assert (closed["status"], closed["n_applied"]) == ("closed", N_BATCHES * BATCH), closed
    direct = SnapshotStream(declaration())
    direct.absorb(snapshots(0, N_BATCHES * BATCH))
    direct.close()
    modes = service.array(f"/v1/runs/{run}/modes")
    np.testing.assert_array_equal(modes, direct.modes(len(modes)))
    np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/mean"), direct.mean())
    np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/singular-values"), direct.singular_values())
    folder = service.data / "runs" / run
    assert not [path for path in folder.rglob("*") if path.suffix in (".part", ".partial", ".record")]
    assert not [path for path in (folder / "journal").rglob("*") if path.is_file()]
