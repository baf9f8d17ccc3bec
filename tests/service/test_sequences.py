"""Repeats, conflicts and order: each batch counts once, in the order of its number."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from tests.service.serving import NPY, RunningService, check_problem, npy, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks


def test_a_repeat_changes_nothing(service: RunningService) -> None:
    run = service.declare()
    first = service.put(run, 0, snapshots(0, 5), headers={"Prefer": "wait=10"})
    before = service.disk(run)
    again = service.put(run, 0, snapshots(0, 5))
    assert (first.status_code, again.status_code) == (201, 200)
    assert again.json()["duplicate"] is True
    assert again.json() | {"duplicate": False} == first.json()
    assert service.disk(run) == before


def test_other_bytes_under_the_same_number(service: RunningService) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, 5), headers={"Prefer": "wait=10"})
    before = service.disk(run)
    document = check_problem(service.put(run, 0, snapshots(1, 6)), 409, "sequence-conflict")
    assert document["sequence"] == 0
    assert service.disk(run) == before


def test_other_times_under_the_same_number(service: RunningService) -> None:
    run = service.declare()
    assert service.put(run, 0, snapshots(0, 3), params={"time": [0.0, 0.1, 0.2]}).status_code == 201
    assert service.put(run, 0, snapshots(0, 3), params={"time": [0.0, 0.1, 0.2]}).status_code == 200
    assert service.put(run, 0, snapshots(0, 3), params={"time": [0.0, 0.1, 0.3]}).status_code == 409
    check_problem(service.put(run, 1, snapshots(3, 5), params={"time": [0.2, 0.4]}), 422, "wrong-times")
    assert service.put(run, 1, snapshots(3, 5), params={"time": [0.25, 0.4]}).status_code == 201
    assert service.client.get(f"/v1/runs/{run}").json()["last_time"] == 0.4


def test_sixteen_at_once_are_one(service: RunningService) -> None:
    run = service.declare()
    with ThreadPoolExecutor(16) as pool:
        answers = list(pool.map(lambda _: service.put(run, 0, snapshots(0, 5)), range(16)))
    assert sorted(answer.status_code for answer in answers) == [200] * 15 + [201]
    assert len(service.disk(run)["rows"]) == 1
    assert [name for name in service.disk(run)["files"] if name.startswith("journal")] == [
        "journal/000000000000000.npy"
    ]


def test_order_of_arrival_does_not_matter(service: RunningService) -> None:
    cuts = [(0, 11), (11, 30), (30, 33), (33, 60), (60, 72)]
    straight, mixed = service.declare(), service.declare()
    for sequence, (start, stop) in enumerate(cuts):
        service.put(straight, sequence, snapshots(start, stop))
    for sequence in (3, 1, 4, 0, 2):
        receipt = service.put(mixed, sequence, snapshots(*cuts[sequence])).json()
        assert (receipt["first_snapshot"] is None) == (sequence in (3, 1, 4))
    for run in (straight, mixed):
        service.applied(run, 72)
        service.client.post(f"/v1/runs/{run}/close")
    np.testing.assert_array_equal(service.array(f"/v1/runs/{straight}/modes"), service.array(f"/v1/runs/{mixed}/modes"))


def test_a_gap_is_visible(service: RunningService) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, 5))
    service.put(run, 2, snapshots(10, 15))
    resource = service.client.get(f"/v1/runs/{run}").json()
    assert resource["next_sequence"] == 1
    assert resource["waiting"] == {"missing_sequence": 1, "n_batches": 1}
    assert resource["n_snapshots"] == 5
    document = check_problem(service.client.post(f"/v1/runs/{run}/close"), 409, "gap-open")
    assert document["missing_sequence"] == 1
    closed = service.client.post(f"/v1/runs/{run}/close", params={"leave_out_waiting": True}).json()
    assert (closed["status"], closed["n_applied"]) == ("closed", 5)


def test_the_service_gives_numbers(service: RunningService) -> None:
    run = service.declare()
    path = f"/v1/runs/{run}/batches"
    first = service.client.post(path, content=npy(snapshots(0, 5)), headers=NPY | {"Idempotency-Key": "a"})
    second = service.client.post(path, content=npy(snapshots(5, 9)), headers=NPY | {"Idempotency-Key": "b"})
    again = service.client.post(path, content=npy(snapshots(0, 5)), headers=NPY | {"Idempotency-Key": "a"})
    assert [answer.status_code for answer in (first, second, again)] == [201, 201, 200]
    assert [answer.json()["sequence"] for answer in (first, second, again)] == [0, 1, 0]
    reused = service.client.post(path, content=npy(snapshots(9, 12)), headers=NPY | {"Idempotency-Key": "a"})
    check_problem(reused, 422, "key-reused")
    assert len(service.disk(run)["rows"]) == 2
