"""Hostile bodies are refused with 4xx, store nothing, and allocate nothing beyond themselves."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator

import httpx
import pytest

from tests.faults.conftest import SECONDS
from tests.faults.hostile import arrays, declarations
from tests.faults.test_torn_posts import MEMORY_GROWTH_BYTES, no_drafts, peak_memory_bytes
from tests.service.serving import NPY, RunningService

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(SECONDS)]

JSON = {"Content-Type": "application/json"}


@pytest.fixture
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningService]:
    with RunningService(tmp_path_factory.mktemp("hostile") / "data", "--max-body-bytes", "1000000") as running:
        yield running
        assert "Traceback" not in running.log, running.log


def check(name: str, answer: httpx.Response) -> int:
    assert 400 <= answer.status_code < 500, (name, answer.status_code, answer.text[:300])
    assert answer.headers["content-type"] == "application/problem+json", name
    assert len(answer.content) < 20_000, name
    return answer.status_code


@pytest.mark.parametrize("place", ["batches/0", "weights", "positions", "triangles"])
def test_hostile_arrays(service: RunningService, place: str, report: Callable[[str], None]) -> None:
    grid = {} if place == "batches/0" else {"grid": {"kind": "points"}}
    run = service.declare(**grid)
    before, memory = service.disk(run), peak_memory_bytes(service)
    bodies = arrays()
    statuses = Counter(
        check(name, service.client.put(f"/v1/runs/{run}/{place}", content=body, headers=NPY))
        for name, body in bodies.items()
    )
    assert no_drafts(service, run) == before
    assert peak_memory_bytes(service) - memory < MEMORY_GROWTH_BYTES
    report(f"{len(bodies)} hostile arrays as {place}: {told(statuses)}")


def test_hostile_declarations(service: RunningService, report: Callable[[str], None]) -> None:
    bodies = declarations()
    runs = service.data / "runs"
    memory = peak_memory_bytes(service)
    statuses = Counter(
        check(name, service.client.post("/v1/runs", content=body, headers=JSON)) for name, body in bodies.items()
    )
    assert list(runs.iterdir()) == []
    assert service.client.get("/v1/runs").json()["runs"] == []
    assert peak_memory_bytes(service) - memory < MEMORY_GROWTH_BYTES
    run = service.declare()
    for name, body in bodies.items():
        check(name, service.client.patch(f"/v1/runs/{run}", content=body, headers=JSON))
    report(f"{len(bodies)} hostile declarations, each also as a change: {told(statuses)}")


def told(statuses: Counter[int]) -> str:
    return ", ".join(f"{n} answered {status}" for status, n in sorted(statuses.items()))
