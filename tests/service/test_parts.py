"""Batches in parts: any order of arrival, each part once, late ones visible, and the bits of the unsplit run."""

from __future__ import annotations

import random
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from streaming import RunDeclaration, SnapshotStream
from tests.service.serving import NPY, RunningService, check_problem, declaration, npy, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks

BATCH = 7
BOUNDS = [0, 5, 17, 18, 48]  # uneven on purpose, one part of a single point
PARTS = [{"start": start, "stop": stop} for start, stop in pairwise(BOUNDS)]


def share(part: int, start: int, stop: int) -> np.ndarray:
    """What one part has of the snapshots [start, stop)."""
    return snapshots(start, stop)[:, :, BOUNDS[part] : BOUNDS[part + 1]]


def put_part(
    service: RunningService, run: str, part: int, sequence: int, batch: np.ndarray | None = None, **options: Any
) -> httpx.Response:
    """Post one part; by default of the batch that has the number ``sequence`` when all hold BATCH snapshots."""
    body = share(part, sequence * BATCH, (sequence + 1) * BATCH) if batch is None else batch
    path = f"/v1/runs/{run}/parts/{part}/batches/{sequence}"
    return service.client.put(path, content=npy(body), headers=NPY | options.pop("headers", {}), **options)


def resource(service: RunningService, run: str) -> dict[str, Any]:
    answer: dict[str, Any] = service.client.get(f"/v1/runs/{run}").json()
    return answer


def check_same_as_unsplit(service: RunningService, run: str, n: int) -> None:
    """Close the run; it holds each of the first n snapshots once, bit for bit as if they had come whole."""
    closed = service.client.post(f"/v1/runs/{run}/close").json()
    assert (closed["status"], closed["n_applied"]) == ("closed", n), closed
    direct = SnapshotStream(declaration())
    direct.absorb(snapshots(0, n))
    direct.close()
    modes = service.array(f"/v1/runs/{run}/modes")
    np.testing.assert_array_equal(modes, direct.modes(len(modes)))
    np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/mean"), direct.mean())
    np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/singular-values"), direct.singular_values())
    assert not list((service.data / "runs" / run / "journal").iterdir())


@pytest.mark.parametrize(
    ("parts", "said"),
    [
        ([], "at least 1"),
        ([{"start": 0, "stop": 47}], "the parts end at 47, n_points is 48"),
        ([{"start": 1, "stop": 48}], "part 0 is [1, 48), it must start at 0"),
        ([{"start": 0, "stop": 20}, {"start": 21, "stop": 48}], "part 1 is [21, 48), it must start at 20"),
        ([{"start": 0, "stop": 20}, {"start": 19, "stop": 48}], "part 1 is [19, 48), it must start at 20"),
        ([{"start": 0, "stop": 48}, {"start": 48, "stop": 48}], "at least one point"),
        ([{"start": 0, "stop": 48, "rank": 3}], "rank"),
    ],
)
def test_parts_must_cover_all_points_once(service: RunningService, parts: list[dict[str, int]], said: str) -> None:
    answer = service.client.post("/v1/runs", json=declaration(parts=parts))
    assert said in str(check_problem(answer, 422, "invalid-request"))
    with pytest.raises(ValueError, match="part"):
        RunDeclaration.model_validate(declaration(parts=parts))


def test_four_parts_in_any_order_give_the_bits_of_the_unsplit_run(service: RunningService) -> None:
    run = service.declare(parts=PARTS)
    posts = [(sequence, part) for sequence in range(8) for part in range(4)]
    random.Random(5).shuffle(posts)
    seen: set[tuple[int, int]] = set()
    for sequence, part in posts:
        receipt = put_part(service, run, part, sequence).json()
        seen.add((sequence, part))
        assert receipt["sequence"] == sequence
        assert receipt["complete"] == all((sequence, other) in seen for other in range(4))
        complete = 0
        while all((complete, other) in seen for other in range(4)):
            complete += 1
        assert (receipt["first_snapshot"] is not None) == (sequence < complete)
        assert resource(service, run)["n_snapshots"] == complete * BATCH
    service.applied(run, 48)
    check_same_as_unsplit(service, run, 8 * BATCH)


def test_parts_from_several_processes_at_once(service: RunningService) -> None:
    """Four processes, two threads in each, and every part posted twice."""
    run = service.declare(parts=PARTS)
    program = (
        "import sys; from concurrent.futures import ThreadPoolExecutor; import numpy as np, httpx\n"
        "url, path = sys.argv[1:3]\n"
        "batches = np.load(path)\n"
        "from tests.service.serving import NPY, npy\n"
        "def put(k):\n"
        "    return httpx.put(f'{url}/{k % 10}', content=npy(batches[k % 10]), headers=NPY, timeout=30).status_code\n"
        "with ThreadPoolExecutor(2) as pool: codes = list(pool.map(put, np.random.default_rng(0).permutation(20)))\n"
        "assert sorted(codes) == [200] * 10 + [201] * 10, codes\n"
    )
    folder = service.data.parent
    processes = []
    for part in range(4):
        path = folder / f"part-{part}.npy"
        np.save(path, np.stack([share(part, k * BATCH, (k + 1) * BATCH) for k in range(10)]))
        url = f"{service.url}/v1/runs/{run}/parts/{part}/batches"
        processes.append(subprocess.Popen([sys.executable, "-c", program, url, str(path)], stderr=subprocess.PIPE))
    for process in processes:
        _, told = process.communicate(timeout=40)
        assert process.returncode == 0, told.decode()
    assert {part["n_repeats"] for part in resource(service, run)["parts"]["slowest"]} == {10}
    check_same_as_unsplit(service, run, 10 * BATCH)


def test_forms_of_a_part_and_of_its_numbers(service: RunningService) -> None:
    """Flat or by fields, float32 or float64 of either byte order: the same snapshots."""
    run = service.declare(parts=PARTS)
    for sequence in range(2):
        for part, dtype in enumerate(("<f4", ">f4", "<f8", ">f8")):
            batch = share(part, sequence * BATCH, (sequence + 1) * BATCH).astype(dtype)
            answer = put_part(service, run, part, sequence, batch.reshape(BATCH, -1) if sequence else batch)
            assert answer.status_code == 201, answer.text
    check_same_as_unsplit(service, run, 2 * BATCH)


def test_repeats_and_conflicts(service: RunningService) -> None:
    run = service.declare(parts=PARTS)
    first = put_part(service, run, 2, 0)
    before = service.disk(run)
    again = put_part(service, run, 2, 0)
    assert (first.status_code, again.status_code) == (201, 200)
    assert again.json() | {"duplicate": False} == first.json()
    assert (first.json()["duplicate"], again.json()["duplicate"]) == (False, True)
    document = check_problem(put_part(service, run, 2, 0, share(2, 1, 8)), 409, "sequence-conflict")
    assert "part 2 of batch 0" in document["detail"]
    assert service.disk(run) == before
    for part in (0, 1, 3):
        last = put_part(service, run, part, 0, headers={"Prefer": "wait=10"} if part == 3 else {})
    assert (last.json()["complete"], last.json()["applied_through"]) == (True, 0)
    assert put_part(service, run, 2, 0).json() == {**last.json(), "duplicate": True}
    check_problem(put_part(service, run, 2, 0, share(2, 1, 8)), 409, "sequence-conflict")
    check_same_as_unsplit(service, run, BATCH)
    assert put_part(service, run, 1, 0).status_code == 200  # also when it is long pruned and closed
    check_problem(put_part(service, run, 1, 1), 409, "run-closed")


def test_sixteen_at_once_are_one(service: RunningService) -> None:
    run = service.declare(parts=PARTS)
    with ThreadPoolExecutor(16) as pool:
        answers = list(pool.map(lambda k: put_part(service, run, k % 4, 0), range(16)))
    assert sorted(answer.status_code for answer in answers) == [200] * 12 + [201] * 4
    check_same_as_unsplit(service, run, BATCH)


def test_parts_of_a_batch_must_agree(service: RunningService) -> None:
    run = service.declare(parts=PARTS)
    times = [0.1, 0.25, 0.3]
    assert put_part(service, run, 0, 0, share(0, 0, 3), params={"time": times}).status_code == 201
    before = service.disk(run)
    short = check_problem(
        put_part(service, run, 1, 0, share(1, 0, 2), params={"time": times[:2]}), 409, "parts-disagree"
    )
    assert (short["sequence"], short["n_snapshots"]) == (0, 3)
    for other in ({}, {"time": [0.1, 0.25, 0.31]}):
        check_problem(put_part(service, run, 1, 0, share(1, 0, 3), params=other), 409, "parts-disagree")
    assert service.disk(run) == before
    assert service.client.get(f"/v1/runs/{run}/parts/1").json()["expected_snapshots"] == 3
    rounded = [time * (1.0 + 2e-16) for time in times]  # a rank that sums its steps for itself
    for part in (1, 2, 3):
        assert put_part(service, run, part, 0, share(part, 0, 3), params={"time": rounded}).status_code == 201
        assert put_part(service, run, part, 0, share(part, 0, 3), params={"time": rounded}).status_code == 200
    check_problem(put_part(service, run, 0, 1, share(0, 3, 5), params={"time": [0.3, 0.4]}), 422, "wrong-times")
    assert resource(service, run)["last_time"] == 0.3


def test_wrong_addresses_and_shapes(service: RunningService) -> None:
    run, whole = service.declare(parts=PARTS), service.declare()
    check_problem(service.put(run, 0, snapshots(0, 3)), 409, "comes-in-parts")
    posted = service.client.post(f"/v1/runs/{run}/batches", content=npy(snapshots(0, 3)), headers=NPY)
    check_problem(posted, 409, "comes-in-parts")
    check_problem(put_part(service, whole, 0, 0, snapshots(0, 3)), 409, "comes-whole")
    check_problem(put_part(service, run, 4, 0, share(0, 0, 3)), 404, "unknown-part")
    check_problem(put_part(service, run, 65536, 0, share(0, 0, 3)), 422, "invalid-request")
    check_problem(put_part(service, "nothing", 0, 0, share(0, 0, 3)), 404, "unknown-run")
    check_problem(service.client.get(f"/v1/runs/{run}/parts/4"), 404, "unknown-part")
    check_problem(service.client.get(f"/v1/runs/{whole}/parts/0"), 409, "comes-whole")
    document = check_problem(put_part(service, run, 1, 0, share(0, 0, 3)), 422, "wrong-shape")
    assert "[n_snapshots, 2, 12] or [n_snapshots, 24]" in document["detail"]
    bad = share(3, 0, 3)
    bad[1, 1, 4] = np.nan
    document = check_problem(put_part(service, run, 3, 0, bad), 422, "not-finite")
    assert (document["snapshot"], document["field"], document["point"]) == (1, "q", 22)  # 18 + 4
    assert service.disk(run)["rows"] == []
    assert [name for name in service.disk(run)["files"] if name.startswith("journal")] == []
    assert resource(service, whole)["parts"] is None


def test_a_late_part_is_visible(service: RunningService) -> None:
    run = service.declare(parts=PARTS)
    assert resource(service, run)["parts"] | {"slowest": []} == {
        "n_parts": 4,
        "n_late": 0,
        "late_since": None,
        "late_seconds": None,
        "slowest": [],
    }
    for sequence in range(3):
        for part in (0, 1, 3) if sequence else range(4):
            put_part(service, run, part, sequence)
    time.sleep(0.3)
    state = resource(service, run)
    assert (state["next_sequence"], state["n_snapshots"]) == (1, BATCH)
    assert state["waiting"] == {"missing_sequence": 1, "n_batches": 2}
    parts = state["parts"]
    assert (parts["n_parts"], parts["n_late"]) == (4, 1)
    assert 0.3 <= parts["late_seconds"] < 30.0
    assert [(one["part"], one["next_sequence"], one["n_waiting"]) for one in parts["slowest"]] == [
        (2, 1, 0),
        (0, 3, 2),
        (1, 3, 2),
        (3, 3, 2),
    ]
    assert parts["slowest"][0]["last_stored"] <= parts["late_since"] <= parts["slowest"][1]["last_stored"]
    assert service.client.get(f"/v1/runs/{run}/parts/2").json()["next_sequence"] == 1
    put_part(service, run, 2, 2)  # ahead of its own gap
    assert resource(service, run)["parts"]["slowest"][0]["n_waiting"] == 1
    document = check_problem(service.client.post(f"/v1/runs/{run}/close"), 409, "gap-open")
    assert "missing or incomplete" in document["detail"]
    put_part(service, run, 2, 1)
    assert resource(service, run)["parts"]["n_late"] == 0
    check_same_as_unsplit(service, run, 3 * BATCH)


def test_a_missing_part_can_be_left_out(service: RunningService) -> None:
    run = service.declare(parts=PARTS)
    for sequence in range(3):
        for part in range(4) if sequence < 2 else range(3):
            put_part(service, run, part, sequence)
    answer = service.client.post(f"/v1/runs/{run}/close", params={"leave_out_waiting": True})
    assert (answer.json()["status"], answer.json()["n_applied"]) == ("closed", 2 * BATCH)
    assert not list((service.data / "runs" / run / "journal").iterdir())


def test_many_parts_are_summed_up(service: RunningService) -> None:
    parts = [{"start": k, "stop": k + 1} for k in range(3000)]
    run = service.declare(n_points=3000, grid={"kind": "none"}, parts=parts)
    for part in (7, 2999):
        assert put_part(service, run, part, 0, np.ones((2, 2, 1), "f4")).status_code == 201
    state = resource(service, run)["parts"]
    assert (state["n_parts"], state["n_late"], len(state["slowest"])) == (3000, 2998, 64)
    assert service.client.get(f"/v1/runs/{run}/parts/2999").json()["n_waiting"] == 1
    assert service.client.delete(f"/v1/runs/{run}").status_code == 204


@pytest.fixture(scope="module")
def tight(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningService]:
    """A service that lets three batches wait, and holds no more of a run than four blocks."""
    limits = {"SLACKWATER_MAX_WAITING_BATCHES": "3", "SLACKWATER_MAX_JOURNAL_BYTES": "1024"}
    with RunningService(tmp_path_factory.mktemp("tight") / "data", environment=limits) as running:
        yield running


def test_waiting_is_bounded(tight: RunningService) -> None:
    """One part far ahead of the others is held back, and never the part that all wait for."""
    run = tight.declare(parts=PARTS)
    for sequence in range(4):
        assert put_part(tight, run, 0, sequence).status_code == 201
    check_problem(put_part(tight, run, 0, 4), 429, "busy")
    for sequence in (3, 2, 1, 0):  # parts of batches that have begun always find room
        for part in (1, 2, 3):
            assert put_part(tight, run, part, sequence).status_code == 201
    assert put_part(tight, run, 0, 4).status_code == 201
    assert resource(tight, run)["next_sequence"] == 4


def test_a_full_journal_takes_what_all_wait_for(tight: RunningService) -> None:
    run = tight.declare(parts=PARTS, block_length=2)  # four blocks: 4 * 2 * 96 * 8 bytes
    sequence = 0
    while (answer := put_part(tight, run, 3, sequence)).status_code == 201:
        sequence += 1
    document = check_problem(answer, 429, "busy")
    assert "bytes) of this run wait" in document["detail"]
    assert sequence >= 2
    for part in (0, 1, 2):
        assert put_part(tight, run, part, 0).status_code == 201
    assert tight.applied(run, BATCH - 1)["next_sequence"] == 1


def post_ranks(service: RunningService, run: str, first: dict[int, int], last: int | None) -> dict[int, int]:
    """Four ranks post side by side, each from its own number, to ``last`` or until cut off.

    Returns for each the first number that was not answered.
    """
    answered = dict(first)

    def post(part: int) -> None:
        with httpx.Client(base_url=service.url, timeout=20.0) as client:
            while last is None or answered[part] < last:
                sequence = answered[part]
                path = f"/v1/runs/{run}/parts/{part}/batches/{sequence}"
                body = npy(share(part, sequence * BATCH, (sequence + 1) * BATCH))
                try:
                    code = client.put(path, content=body, headers=NPY).status_code
                except httpx.TransportError:
                    return
                assert code in (200, 201), code
                answered[part] = sequence + 1

    with ThreadPoolExecutor(4) as pool:
        list(pool.map(post, range(4)))
    return answered


@pytest.mark.parametrize("n_kills", [2, pytest.param(50, marks=[pytest.mark.campaign, pytest.mark.timeout(900)])])
def test_killed_under_four_part_load(tmp_path: Path, n_kills: int) -> None:
    """Killed while four ranks post; each rank starts again two batches before its last receipt."""
    data, moment = tmp_path / "data", random.Random(n_kills)
    answered = dict.fromkeys(range(4), 0)
    run = ""
    for _ in range(n_kills):
        with RunningService(data) as service:
            run = run or service.declare(parts=PARTS)
            for part, sequence in answered.items():
                stored = service.client.get(f"/v1/runs/{run}/parts/{part}").json()["next_sequence"]
                assert sequence <= stored <= sequence + 1  # the last one may be stored and not answered
            killer = threading.Timer(moment.uniform(0.05, 0.6), service.process.kill)
            killer.start()
            again = post_ranks(service, run, {part: max(0, n - 2) for part, n in answered.items()}, None)
            answered = {part: max(n, again[part]) for part, n in answered.items()}
            killer.join()
            service.process.wait(5)
    with RunningService(data) as service:
        last = max(answered.values()) + 3
        post_ranks(service, run, {part: max(0, n - 2) for part, n in answered.items()}, last)
        state = resource(service, run)
        assert (state["next_sequence"], state["n_snapshots"]) == (last, last * BATCH)
        assert all(part["n_repeats"] >= min(2, answered[part["part"]]) for part in state["parts"]["slowest"])
        check_same_as_unsplit(service, run, last * BATCH)


def test_restart_keeps_what_is_incomplete_and_names_what_is_damaged(tmp_path: Path) -> None:
    data = tmp_path / "data"
    with RunningService(data) as service:
        run, spoiled = service.declare(parts=PARTS), service.declare(parts=PARTS)
        for sequence, part in ((0, 0), (0, 2), (1, 1)):
            put_part(service, run, part, sequence)
        for part in range(3):
            put_part(service, spoiled, part, 0)
        service.end(signal.SIGKILL)
    journal = data / "runs" / run / "journal"
    stray = journal / f"{0:015d}.00003.npy"
    stray.write_bytes(b"renamed, never acknowledged")
    victim = data / "runs" / spoiled / "journal" / f"{0:015d}.00001.npy"
    body = bytearray(victim.read_bytes())
    body[-3] ^= 1
    victim.write_bytes(body)
    with RunningService(data) as service:
        assert not stray.exists()
        assert len(list(journal.iterdir())) == 3
        assert [one["part"] for one in resource(service, run)["parts"]["slowest"]] == [1, 3, 0, 2]
        for sequence in range(2):
            for part in range(4):
                known = (sequence, part) in {(0, 0), (0, 2), (1, 1)}
                assert put_part(service, run, part, sequence).json()["duplicate"] is known
        check_same_as_unsplit(service, run, 2 * BATCH)
        check_damage_is_named(service, spoiled, victim)


def check_damage_is_named(service: RunningService, run: str, victim: Path) -> None:
    """A flipped bit in a part that waited is found once the last part has come; the run fails, the file stays."""
    put_part(service, run, 3, 0)
    deadline = time.monotonic() + 20
    while (state := resource(service, run))["status"] != "failed":
        assert time.monotonic() < deadline, state
        time.sleep(0.02)
    assert victim.name in state["reason"]
    assert victim.exists()
