"""Snapshots of the made-up flow, posted to a real service."""

from __future__ import annotations

from typing import Any

from tests.page.flows import declaration, snapshots
from tests.service.serving import RunningService

BATCH = 80


def declare(service: RunningService, **changes: Any) -> str:
    answer = service.client.post("/v1/runs", json=declaration(**changes))
    assert answer.status_code == 201, answer.text
    return str(answer.json()["id"])


def post(service: RunningService, run: str, start: int, stop: int) -> None:
    """Post snapshots [start, stop) in batches, and wait until they are in the basis."""
    for first in range(start, stop, BATCH):
        answer = service.put(run, first // BATCH, snapshots(first, min(stop, first + BATCH)))
        assert answer.status_code == 201, answer.text
    service.applied(run, stop - stop % 16)
