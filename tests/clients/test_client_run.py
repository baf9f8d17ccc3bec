"""A run from its declaration to its modes, over a real service."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from slackwater_client import Client, ConflictError, InvalidError, NotFoundError, Run
from tests.clients.conftest import N_POINTS, Service

Make = Callable[..., npt.NDArray[np.float32]]


@pytest.fixture
def run(client: Client, declaration: dict[str, Any]) -> Run:
    return client.declare(declaration)


def test_a_run_from_first_snapshot_to_modes(run: Run, make_snapshots: Make) -> None:
    snapshots = make_snapshots(320)
    first = run.post(snapshots[:200], sequence=0)
    second = run.post(snapshots[200:], sequence=1)
    assert (first.sequence, first.first_snapshot, first.n_snapshots, first.duplicate) == (0, 0, 200, False)
    assert (second.sequence, second.first_snapshot, second.n_snapshots) == (1, 200, 120)
    run.close()
    report = run.wait(20.0)
    assert report["n_snapshots"] == 320
    assert run.status == "closed"
    modes, mean = run.modes(2), run.mean()
    assert modes.shape == (2, 2, N_POINTS)
    np.testing.assert_array_equal(run.mode(1), modes[0])
    np.testing.assert_allclose(mean, snapshots.mean(axis=0, dtype=np.float64), rtol=0, atol=1e-5)
    gram = np.tensordot(modes, modes, ([1, 2], [1, 2]))
    np.testing.assert_allclose(gram, np.eye(2), rtol=0, atol=1e-5)
    values = run.singular_values()
    exact = np.linalg.svd((snapshots - snapshots.mean(axis=0)).reshape(320, -1), compute_uv=False)
    np.testing.assert_allclose(values[:2], exact[:2], rtol=1e-2)
    times, coefficients = run.coefficients(2)
    np.testing.assert_allclose(times, 0.5 * np.arange(320), rtol=0, atol=1e-9)
    rebuilt = np.tensordot(coefficients, modes, 1) + mean
    assert np.abs(rebuilt - snapshots).max() < 0.5  # ten times the noise; the patterns have a spread of 3


def test_a_repeat_counts_once_and_other_bytes_are_refused(run: Run, make_snapshots: Make) -> None:
    snapshots = make_snapshots(40)
    run.post(snapshots[:20], sequence=0)
    assert run.post(snapshots[:20], sequence=0).duplicate
    with pytest.raises(ConflictError):
        run.post(snapshots[20:], sequence=0)
    assert run.next_sequence == 1
    run.close()
    assert run.wait(20.0)["n_snapshots"] == 20


def test_the_service_numbers_batches_without_a_number(run: Run, make_snapshots: Make) -> None:
    snapshots = make_snapshots(40)
    assert run.post(snapshots[:20]).sequence == 0
    assert run.post(snapshots[20:]).sequence == 1


def test_a_batch_of_the_wrong_shape_says_so_and_stores_nothing(run: Run) -> None:
    with pytest.raises(InvalidError, match="59"):
        run.post(np.zeros((4, 2, 59), dtype=np.float32), sequence=0)
    assert run.next_sequence == 0


def test_a_value_that_is_not_finite_is_refused(run: Run, make_snapshots: Make) -> None:
    snapshots = make_snapshots(4)
    snapshots[2, 1, 7] = np.nan
    with pytest.raises(InvalidError, match="7"):
        run.post(snapshots, sequence=0)
    assert run.next_sequence == 0


def test_times_go_with_the_snapshots(run: Run, make_snapshots: Make) -> None:
    run.post(make_snapshots(20), sequence=0, times=np.arange(20) * 0.25)
    with pytest.raises(InvalidError):
        run.post(make_snapshots(20), sequence=1, times=np.arange(20) * 0.25)
    with pytest.raises(ValueError, match="finite"):
        run.post(make_snapshots(2), sequence=1, times=[1.0, np.nan])
    run.close()
    assert run.wait(20.0)["time_span"] == pytest.approx(19 * 0.25, rel=0.1)


def test_many_times_fit_one_request(run: Run, make_snapshots: Make) -> None:
    times = np.cumsum(np.random.default_rng(1).uniform(0.1, 0.2, 3000))
    run.post(make_snapshots(1000), sequence=0, times=times[:1000])
    assert run.resource["last_time"] is None
    assert run.refresh()["last_time"] == times[999]
    with pytest.raises(ValueError, match="2000 uneven times"):
        run.post(make_snapshots(2000), sequence=1, times=times[1000:])
    run.post(make_snapshots(2000), sequence=1, times=times[999] + 0.1 * np.arange(1, 2001))
    assert run.refresh()["last_time"] == pytest.approx(times[999] + 200.0, rel=1e-12)


def test_weights_come_before_the_first_batch(run: Run, make_snapshots: Make) -> None:
    run.put_weights(np.full(N_POINTS, 0.25))
    run.post(make_snapshots(20), sequence=0)
    with pytest.raises(ConflictError):
        run.put_weights(np.ones(N_POINTS))


def test_positions_belong_to_scattered_points(client: Client, declaration: dict[str, Any]) -> None:
    run = client.declare({**declaration, "grid": {"kind": "points"}})
    run.put_positions(np.random.default_rng(2).normal(size=(N_POINTS, 3)))


def test_a_misspelt_member_is_named(client: Client, declaration: dict[str, Any]) -> None:
    with pytest.raises(InvalidError, match="retained_rnak"):
        client.declare({**declaration, "retained_rnak": 9})


def test_runs_are_found_again_until_deleted(client: Client, run: Run) -> None:
    assert client.run(run.id).declaration == run.declaration
    assert run.id in [found.id for found in client.runs()]
    run.delete()
    with pytest.raises(NotFoundError):
        client.run(run.id)
    assert run.id not in [found.id for found in client.runs()]


def test_the_address_comes_from_the_environment(service: Service, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SLACKWATER_URL", service.url)
    with Client() as client:
        assert client.url == service.url
        assert isinstance(client.runs(), list)


def test_waiting_ends_when_settled_and_when_time_is_over(run: Run, make_snapshots: Make) -> None:
    assert run.wait(0.2)["verdict"]["state"] == "gathering"
    for sequence in range(8):
        receipt = run.post(make_snapshots(200, seed=sequence), sequence=sequence)
    report = run.wait(20.0)
    assert report["verdict"]["state"] == "settled"
    receipt = run.post(make_snapshots(1, seed=99), sequence=8)
    assert (receipt.verdict, receipt.advice) == ("settled", "may stop")


def test_a_solver_at_rest_leaves_the_run_gathering(run: Run, make_snapshots: Make) -> None:
    run.post(np.repeat(make_snapshots(1), 200, axis=0), sequence=0)
    run.close()
    assert run.wait(20.0)["verdict"]["state"] == "gathering"
    assert run.status == "closed"
