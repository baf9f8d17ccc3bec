"""Events resume where a reader stopped, without gap or repeat."""

from __future__ import annotations

import json
import time
from typing import Any

import pytest

from tests.service.serving import RunningService, check_problem, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks


def read(service: RunningService, path: str, count: int, headers: dict[str, str] | None = None) -> list[Any]:
    """The next ``count`` events as (id, kind, data)."""
    events, current = [], {}
    with service.client.stream("GET", path, headers=headers) as stream:
        assert stream.headers["content-type"].startswith("text/event-stream")
        deadline = time.monotonic() + 20
        for line in stream.iter_lines():
            assert time.monotonic() < deadline, (events, service.log)
            name, _, value = line.partition(": ")
            if line == "" and "id" in current:
                events.append((int(current["id"]), current["event"], json.loads(current["data"])))
                current = {}
                if len(events) == count:
                    break
            elif name in ("id", "event", "data"):
                current[name] = value
    return events


def test_events_resume(service: RunningService) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, 60), headers={"Prefer": "wait=10"})
    service.client.post(f"/v1/runs/{run}/close")
    path = f"/v1/runs/{run}/events"
    whole = read(service, f"{path}?after=0", 6)
    kinds = [kind for _, kind, _ in whole]
    assert kinds[0] == "declared"
    assert "evaluation" in kinds
    assert "checkpoint" in kinds
    assert [number for number, _, _ in whole] == sorted({number for number, _, _ in whole})
    assert all(data["run"] == run for _, _, data in whole)
    rest = read(service, path, 3, {"Last-Event-ID": str(whole[2][0])})
    assert rest == whole[3:]


def test_bad_event_numbers(service: RunningService) -> None:
    check_problem(service.client.get("/v1/events", headers={"Last-Event-ID": "x"}), 422, "invalid-request")


def test_metrics_count(service: RunningService) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, 5))
    answer = service.client.get("/metrics")
    assert answer.headers["content-type"].startswith("application/openmetrics-text")
    values = dict(line.rsplit(" ", 1) for line in answer.text.splitlines() if not line.startswith("#"))
    assert int(values["slackwater_batches_stored_total"]) >= 1
    assert answer.text.endswith("# EOF\n")
