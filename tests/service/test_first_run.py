"""Declare, post, read the receipt, the verdict and the modes: the main road, against the engine in process."""

from __future__ import annotations

import io
import zipfile
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
import zarr

from streaming import Convergence, SnapshotStream
from streaming.checkpoint import STORE
from tests.service.serving import RunningService, declaration, npy, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks

N = 120


def engine(**changes: object) -> SnapshotStream:
    stream = SnapshotStream(declaration(**changes))
    stream.absorb(snapshots(0, N))
    stream.close()
    return stream


def post_all(service: RunningService, run: str, cuts: list[int]) -> None:
    for sequence, (start, stop) in enumerate(pairwise(cuts)):
        answer = service.put(run, sequence, snapshots(start, stop))
        assert answer.status_code == 201, answer.text
        receipt = answer.json()
        assert receipt["sequence"] == sequence
        assert receipt["first_snapshot"] == start
        assert receipt["n_snapshots"] == stop - start
        assert receipt["duplicate"] is False
        assert receipt["advice"] == ("may stop" if receipt["verdict"] == "settled" else "continue")


def test_the_service_gives_the_bits_of_the_engine(service: RunningService) -> None:
    run = service.declare()
    post_all(service, run, [0, 5, 40, 41, 70, N])
    closed = service.client.post(f"/v1/runs/{run}/close")
    assert closed.status_code == 200, closed.text
    assert closed.json()["status"] == "closed"
    direct = engine()
    base = f"/v1/runs/{run}"
    n_modes = len(service.array(f"{base}/modes"))
    np.testing.assert_array_equal(service.array(f"{base}/modes"), direct.modes(n_modes))
    np.testing.assert_array_equal(service.array(f"{base}/modes?n=2"), direct.modes(2))
    np.testing.assert_array_equal(service.array(f"{base}/modes/2"), direct.modes(2)[1])
    np.testing.assert_array_equal(service.array(f"{base}/mean"), direct.mean())
    np.testing.assert_array_equal(service.array(f"{base}/singular-values"), direct.singular_values())
    times, coefficients = direct.coefficients(2)
    np.testing.assert_allclose(service.array(f"{base}/coefficients?n=2"), coefficients, rtol=1e-9, atol=1e-9)
    np.testing.assert_array_equal(service.array(f"{base}/times"), times)
    assert service.client.get(f"{base}/convergence").json() == direct.convergence().model_dump(mode="json")


def test_modes_agree_with_a_dense_svd(service: RunningService) -> None:
    """Oracle: numpy.linalg.svd of the whole record; the two strong patterns are far above the noise."""
    run = service.declare(criterion={"n_modes": 2, "startup": "keep"})  # the whole record, as the oracle has it
    post_all(service, run, [0, 60, N])
    service.client.post(f"/v1/runs/{run}/close")
    rows = snapshots(0, N).reshape(N, 96).astype(float)
    _, values, basis = np.linalg.svd(rows - rows.mean(0), full_matrices=False)
    modes = service.array(f"/v1/runs/{run}/modes?n=2").reshape(2, 96)
    np.testing.assert_allclose(np.abs(np.sum(modes * basis[:2], axis=1)), 1.0, atol=1e-4)
    np.testing.assert_allclose(service.array(f"/v1/runs/{run}/singular-values")[:2], values[:2], rtol=1e-3)
    np.testing.assert_allclose(service.array(f"/v1/runs/{run}/mean").ravel(), rows.mean(0), atol=1e-4)


def test_weights_reach_the_engine(service: RunningService) -> None:
    run = service.declare()
    weights = np.linspace(1.0, 3.0, 48)
    answer = service.client.put(
        f"/v1/runs/{run}/weights", content=npy(weights), headers={"Content-Type": "application/x-npy"}
    )
    assert answer.status_code == 204, answer.text
    post_all(service, run, [0, N])
    service.client.post(f"/v1/runs/{run}/close")
    modes = service.array(f"/v1/runs/{run}/modes?n=3")
    gram = np.einsum("ifp,p,jfp->ij", modes, weights, modes)
    np.testing.assert_allclose(gram, np.eye(3), atol=1e-5)  # orthonormal in the weighted inner product
    late = service.client.put(
        f"/v1/runs/{run}/weights", content=npy(weights), headers={"Content-Type": "application/x-npy"}
    )
    assert late.status_code == 409


def test_all_accepted_types_and_shapes_count_the_same(service: RunningService) -> None:
    bits = []
    for shape, kind in [((-1, 2, 48), "<f4"), ((-1, 96), ">f4"), ((-1, 2, 6, 8), "<f8"), ((-1, 2, 48), ">f8")]:
        run = service.declare()
        batch = snapshots(0, 12).reshape(shape).astype(kind)  # one block
        assert service.put(run, 0, batch, headers={"Prefer": "wait=10"}).status_code == 201
        bits.append(service.array(f"/v1/runs/{run}/modes"))
    for other in bits[1:]:
        np.testing.assert_array_equal(other, bits[0])


def test_waiting_for_the_batch_to_be_applied(service: RunningService) -> None:
    run = service.declare()
    receipt = service.put(run, 0, snapshots(0, 30), headers={"Prefer": "wait=10"}).json()
    assert receipt["applied_through"] == 0
    assert service.array(f"/v1/runs/{run}/modes").shape[1:] == (2, 48)


def test_before_the_first_block_the_verdict_is_gathering(service: RunningService) -> None:
    run = service.declare()
    report = Convergence.model_validate(service.client.get(f"/v1/runs/{run}/convergence").json())
    assert report.verdict.state == "gathering"
    assert report.verdict.reasons[0].code == "no-block-yet"
    assert service.client.get(f"/v1/runs/{run}/modes").json()["type"] == "/problems/not-yet"


def test_convergence_is_not_sent_twice(service: RunningService) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, 30), headers={"Prefer": "wait=10"})
    first = service.client.get(f"/v1/runs/{run}/convergence")
    again = service.client.get(f"/v1/runs/{run}/convergence", headers={"If-None-Match": first.headers["etag"]})
    assert again.status_code == 304
    assert again.content == b""
    history = service.client.get(f"/v1/runs/{run}/convergence/history").json()["evaluations"]
    assert [report["n_snapshots"] for report in history] == sorted(report["n_snapshots"] for report in history)
    assert history


def test_held_requests_end_in_time(service: RunningService) -> None:
    run = service.declare()
    answer = service.client.get(f"/v1/runs/{run}/convergence?wait_for=settled&timeout=0.3")
    assert answer.status_code == 200
    assert 0.25 < answer.elapsed.total_seconds() < 3.0


def test_small_arrays_as_json(service: RunningService) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, 30), headers={"Prefer": "wait=10"})
    json = {"Accept": "application/json"}
    modes = service.client.get(f"/v1/runs/{run}/modes?n=2", headers=json).json()
    assert modes["shape"] == [2, 2, 48]
    np.testing.assert_allclose(modes["values"], service.array(f"/v1/runs/{run}/modes?n=2"), rtol=1e-6)
    both = service.client.get(f"/v1/runs/{run}/coefficients?n=2", headers=json).json()
    assert len(both["times"]["values"]) == both["coefficients"]["shape"][0]
    refused = service.client.get(f"/v1/runs/{run}/modes", headers={"Accept": "text/csv"})
    assert refused.json()["type"] == "/problems/not-acceptable"


def test_an_archived_checkpoint_opens_elsewhere(service: RunningService, tmp_path: Path) -> None:
    run = service.declare()
    service.put(run, 0, snapshots(0, N))
    service.client.post(f"/v1/runs/{run}/close")
    listed = service.client.get(f"/v1/runs/{run}/checkpoints").json()["checkpoints"]
    answer = service.client.get(listed[0]["archive"])
    assert answer.status_code == 200
    with zipfile.ZipFile(io.BytesIO(answer.content)) as archive:
        assert archive.testzip() is None
        archive.extractall(tmp_path)
    folder = next(tmp_path.iterdir())
    group = zarr.open_group(folder / STORE, mode="r")
    shown = service.array(f"/v1/runs/{run}/modes/1")[0].reshape(6, 8)
    np.testing.assert_array_equal(np.asarray(group["mode_p"][0]), shown)
    assert SnapshotStream.load(folder).n_applied == N


def test_declaring_again_under_the_same_key(service: RunningService) -> None:
    """A client that lost the answer asks again, and gets the run that it has."""
    key = {"Idempotency-Key": "9d2f"}
    first, again = (service.client.post("/v1/runs", json=declaration(), headers=key) for _ in range(2))
    assert first.json() == again.json()
    other = service.client.post("/v1/runs", json=declaration(dtype="float64"), headers=key)
    assert other.json()["type"] == "/problems/key-reused"


def test_a_criterion_may_change_before_the_first_batch(service: RunningService) -> None:
    run = service.declare()
    changed = service.client.patch(f"/v1/runs/{run}", json={"criterion": {"n_modes": 3}})
    assert changed.json()["declaration"]["criterion"]["n_modes"] == 3
    refused = service.client.patch(f"/v1/runs/{run}", json={"criterion": {"n_modes": 6}})
    assert refused.json()["type"] == "/problems/invalid-request"
    assert service.client.get(f"/v1/runs/{run}").json() == changed.json()


def test_labels_change_and_runs_are_removed(service: RunningService) -> None:
    run = service.declare()
    changed = service.client.patch(f"/v1/runs/{run}", json={"labels": {"incidence_deg": 4}})
    assert changed.json()["declaration"]["labels"] == {"incidence_deg": 4}
    service.put(run, 0, snapshots(0, 30), headers={"Prefer": "wait=10"})
    assert service.client.patch(f"/v1/runs/{run}", json={"criterion": {"n_modes": 3}}).status_code == 409
    assert run in [one["id"] for one in service.client.get("/v1/runs").json()["runs"]]
    assert service.client.delete(f"/v1/runs/{run}").status_code == 204
    assert service.client.get(f"/v1/runs/{run}").status_code == 404
    other = service.declare()  # the worker takes turns: when it has applied this, it has removed that
    service.put(other, 0, snapshots(0, 30), headers={"Prefer": "wait=10"})
    assert not (service.data / "runs" / run).exists()
    assert not list((service.data / "deleted").iterdir())


def test_answers_come_at_once(service: RunningService) -> None:
    """An answer in two parts must not wait for the acknowledgement of the first, 40 ms on Linux (RFC 1122, 4.2.3.2)."""
    taken = sorted(service.client.get("/livez").elapsed.total_seconds() for _ in range(15))
    assert taken[3] < 0.03
