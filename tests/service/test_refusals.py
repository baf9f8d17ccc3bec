"""Every bad input is refused with a problem document that says what to do, and changes nothing on disk."""

from __future__ import annotations

import base64
import hashlib
import json
import pickle
import socket
import time
from typing import Any

import numpy as np
import pytest

from service.problems import CATALOGUE
from tests.service.serving import NPY, RunningService, check_problem, declaration, npy, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks


@pytest.fixture(scope="module")
def run(service: RunningService) -> str:
    """A run that holds one batch of five snapshots, too few for a block."""
    run = service.declare()
    service.put(run, 0, snapshots(0, 5), headers={"Prefer": "wait=10"})
    return run


def bad_value(value: float) -> bytes:
    batch = snapshots(5, 8)
    batch[1, 1, 7] = value
    return npy(batch)


def header_only(text: str, version: bytes = b"\x01\x00") -> bytes:
    return b"\x93NUMPY" + version + len(text).to_bytes(2, "little") + text.encode()


GOOD = npy(snapshots(5, 8))
BODIES: dict[str, tuple[bytes, int, str, list[str]]] = {
    "wrong point count": (npy(np.zeros((3, 2, 47), "f4")), 422, "wrong-shape", ["[3, 2, 47]", "[n_snapshots, 2, 48]"]),
    "no batch axis": (npy(np.zeros((2, 48), "f4")), 422, "wrong-shape", ["[2, 48]"]),
    "no snapshots": (npy(np.zeros((0, 2, 48), "f4")), 422, "wrong-shape", ["at least one"]),
    "integers": (npy(np.zeros((3, 2, 48), "i4")), 422, "invalid-array", ["<i4", "astype"]),
    "half floats": (npy(np.zeros((3, 2, 48), "f2")), 422, "invalid-array", ["<f2"]),
    "complex": (npy(np.zeros((3, 2, 48), "c8")), 422, "invalid-array", ["<c8"]),
    "huge text type": (
        header_only("{'descr': '|S0', 'fortran_order': False, 'shape': (1000000000000,), }\n"),
        422,
        "invalid-array",
        ["|S0"],
    ),
    "huge shape": (
        header_only("{'descr': '<f4', 'fortran_order': False, 'shape': (10000000000000, 2, 48), }\n"),
        413,
        "body-too-large",
        ["10000000000000"],
    ),
    "Fortran order": (npy(np.asfortranarray(snapshots(5, 8))), 422, "invalid-array", ["ascontiguousarray"]),
    "pickled objects": (npy(np.full((3, 2, 48), None)), 422, "invalid-array", ["pickled objects are never read"]),
    "a bare pickle": (pickle.dumps([1, 2, 3]), 422, "invalid-array", ["magic"]),
    "NaN": (bad_value(np.nan), 422, "not-finite", ["snapshot 1", "q", "point 7", "nan"]),
    "Inf": (bad_value(np.inf), 422, "not-finite", ["snapshot 1", "q", "point 7", "inf"]),
    "too large for float32": (
        npy(np.full((1, 2, 48), 1e300)),
        422,
        "not-finite",
        ["snapshot 0", "p", "point 0", "too large for float32"],
    ),
    "bytes after the array": (GOOD + b"\0", 422, "invalid-array", ["bytes"]),
    "short array": (GOOD[:-4], 422, "invalid-array", ["bytes"]),
    "empty": (b"", 422, "invalid-array", ["header"]),
    "half a header": (GOOD[:20], 422, "invalid-array", ["header"]),
    "deep header": (header_only("(" * 3000 + "\n"), 422, "invalid-array", ["dictionary"]),
    "code in the header": (header_only("__import__('os').getcwd()\n"), 422, "invalid-array", ["dictionary"]),
    "unknown version": (b"\x93NUMPY\x09\x00" + GOOD[8:], 422, "invalid-array", ["version 9"]),
    "too large a body": (npy(np.zeros((3000, 2, 48), "f4")), 413, "body-too-large", ["1000000"]),
}


@pytest.mark.parametrize("name", BODIES)
def test_bad_bodies_change_nothing(service: RunningService, run: str, name: str) -> None:
    body, status, kind, words = BODIES[name]
    before = service.disk(run)
    answer = service.client.put(f"/v1/runs/{run}/batches/1", content=body, headers=NPY)
    document = check_problem(answer, status, kind)
    assert all(word in document["detail"] for word in words), document["detail"]
    assert service.disk(run) == before


def _digest(data: bytes) -> str:
    return f"sha-256=:{base64.b64encode(hashlib.sha256(data).digest()).decode()}:"


REQUESTS: list[tuple[str, dict[str, str], str, int, str]] = [
    ("batches/1", {"Content-Type": "text/csv"}, "", 415, "wrong-media-type"),
    ("batches/1", {"Content-Encoding": "gzip"}, "", 415, "wrong-media-type"),
    ("batches/1", {"Content-Digest": _digest(b"other")}, "", 400, "digest-mismatch"),
    ("batches/1", {"Content-Digest": "md5=:abc:"}, "", 400, "bad-digest-header"),
    ("batches/1", {}, "?time=0&time=1", 422, "wrong-times"),
    ("batches/1", {}, "?time=0&time=2&time=1", 422, "wrong-times"),
    ("batches/1", {}, "?time=0&time=nan&time=1", 422, "wrong-times"),
    ("batches/1", {}, "?start_time=today", 422, "wrong-times"),
    ("batches/1", {}, "?start_time=5&time_step=-1", 422, "wrong-times"),
    ("batches/1", {}, "?time_step=1", 422, "wrong-times"),
    ("batches/1", {}, "?start_time=5&time_step=1", 422, "wrong-times"),  # the first batch came without times
    ("batches/-1", {}, "", 422, "invalid-request"),
    ("batches/one", {}, "", 422, "invalid-request"),
    ("batches/99999999999999999999", {}, "", 422, "invalid-request"),
]


@pytest.mark.parametrize(("path", "headers", "query", "status", "kind"), REQUESTS)
def test_bad_requests_change_nothing(
    service: RunningService, run: str, path: str, headers: dict[str, str], query: str, status: int, kind: str
) -> None:
    before = service.disk(run)
    answer = service.client.put(f"/v1/runs/{run}/{path}{query}", content=GOOD, headers=NPY | headers)
    check_problem(answer, status, kind)
    assert service.disk(run) == before


def test_a_right_digest_is_taken(service: RunningService) -> None:
    run = service.declare()
    answer = service.put(run, 0, snapshots(5, 8), headers={"Content-Digest": _digest(GOOD)})
    assert answer.status_code == 201


def test_chunked_bodies_are_refused(service: RunningService, run: str) -> None:
    before = service.disk(run)
    answer = service.client.put(f"/v1/runs/{run}/batches/1", content=iter([GOOD]), headers=NPY)
    check_problem(answer, 411, "length-needed")
    assert service.disk(run) == before


@pytest.mark.parametrize("cut", [0, 7, 60, 128, 129, len(GOOD) - 1])
def test_torn_bodies_leave_nothing(service: RunningService, run: str, cut: int) -> None:
    before = disk_without_drafts(service, run)
    host, port = service.url.removeprefix("http://").split(":")
    with socket.create_connection((host, int(port)), timeout=5) as connection:
        head = f"PUT /v1/runs/{run}/batches/1 HTTP/1.1\r\nHost: {host}\r\nContent-Length: {len(GOOD)}\r\n"
        connection.sendall(head.encode() + b"Content-Type: application/x-npy\r\n\r\n" + GOOD[:cut])
    time.sleep(0.02)
    assert disk_without_drafts(service, run) == before


def disk_without_drafts(service: RunningService, run: str) -> dict[str, Any]:
    """What is on disk once no body is on its way any more; fails when a draft stays."""
    deadline = time.monotonic() + 5
    while any(name.endswith(".part") for name in service.disk(run)["files"]):
        assert time.monotonic() < deadline, service.disk(run)
        time.sleep(0.02)
    return service.disk(run)


def test_unknown_runs(service: RunningService) -> None:
    document = check_problem(service.put("no-such-run", 0, snapshots(0, 5)), 404, "unknown-run")
    assert "no-such-run" in document["detail"]
    for path in ("", "/convergence", "/modes", "/mean", "/coefficients", "/checkpoints", "/events"):
        check_problem(service.client.get(f"/v1/runs/no-such-run{path}"), 404, "unknown-run")


def test_a_batch_after_close(service: RunningService) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, 30))
    service.client.post(f"/v1/runs/{run}/close")
    before = service.disk(run)
    check_problem(service.put(run, 1, snapshots(30, 40)), 409, "run-closed")
    assert service.put(run, 0, snapshots(0, 30)).json()["duplicate"] is True
    assert service.disk(run) == before


DECLARATIONS: list[tuple[dict[str, Any], str]] = [
    ({"retained_rnak": 5}, "retained_rnak"),
    ({"n_points": 10**13}, "n_points"),
    ({"n_points": 0}, "n_points"),
    ({"n_points": 47}, "47"),
    ({"dtype": "float16"}, "dtype"),
    ({"fields": []}, "fields"),
    ({"fields": [{"name": "u"}, {"name": "u"}]}, "differ"),
    ({"fields": [{"name": "../../u"}]}, "../../u"),
    ({"criterion": {"max_angle_deg": 0}}, "max_angle_deg"),
    ({"criterion": {"n_modes": 6}}, "n_modes"),
    ({"retained_rank": 10**6}, "retained_rank"),
    ({"name": ""}, "name"),
    ({"name": "a\u0000b"}, "name"),
]


@pytest.mark.parametrize(("change", "word"), DECLARATIONS)
def test_bad_declarations(service: RunningService, change: dict[str, Any], word: str) -> None:
    before = _run_ids(service), sorted((service.data / "runs").iterdir())
    document = check_problem(service.client.post("/v1/runs", json=declaration(**change)), 422, "invalid-request")
    assert word in json.dumps(document)
    assert (_run_ids(service), sorted((service.data / "runs").iterdir())) == before


def _run_ids(service: RunningService) -> list[str]:
    """Runs of the service; what else their resources say goes on changing while their snapshots are applied."""
    return [run["id"] for run in service.client.get("/v1/runs").json()["runs"]]


def test_runs_larger_than_memory_are_refused(service: RunningService) -> None:
    large = declaration(n_points=10**10, grid={"kind": "none"})
    document = check_problem(service.client.post("/v1/runs", json=large), 422, "run-too-large")
    assert "retained_rank" in document["detail"]


BAD_JSON = ["", "{", "[" * 100_000, '{"name": NaN}', "null", '"x"', b"\xff\xfe\x00"]


@pytest.mark.parametrize("number", range(len(BAD_JSON)))
def test_bad_json(service: RunningService, number: int) -> None:
    text = BAD_JSON[number]
    answer = service.client.post("/v1/runs", content=text, headers={"Content-Type": "application/json"})
    assert answer.status_code in (400, 422)
    assert answer.headers["content-type"] == "application/problem+json"


def test_labels_must_be_finite(service: RunningService) -> None:
    text = json.dumps(declaration()).replace('"name": "roof panel"', '"name": "roof panel", "labels": {"a": 1e999}')
    answer = service.client.post("/v1/runs", content=text, headers={"Content-Type": "application/json"})
    assert answer.status_code == 422


def test_only_loopback_names_are_served(service: RunningService) -> None:
    check_problem(service.client.get("/v1/runs", headers={"Host": "attacker.example"}), 403, "host-refused")


def test_unknown_paths_and_methods(service: RunningService) -> None:
    check_problem(service.client.get("/v2/runs"), 404, "not-found")
    check_problem(service.client.put("/v1/runs"), 405, "method-not-allowed")


def test_every_problem_type_has_its_page(service: RunningService) -> None:
    docs = service.client.get("/docs").text
    for kind, problem in CATALOGUE.items():
        page = service.client.get(f"/problems/{kind}")
        assert page.status_code == 200
        assert problem.title in page.text
        assert f"/problems/{kind}" in docs
    check_problem(service.client.get("/problems/none"), 404, "not-found")
