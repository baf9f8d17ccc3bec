"""The hook under a solver: nothing lost, nothing doubled, and never in the way.

What the service holds at the end is checked through its mean and its count: a snapshot lost or counted twice
changes both.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from slackwater_client import Advice, Client, Hook, Run, UnsentError, UnsentWarning
from tests.clients.conftest import N_POINTS, Service
from tests.clients.cutting_proxy import CuttingProxy

Make = Callable[..., npt.NDArray[np.float32]]


def drive(
    run: Run, snapshots: npt.NDArray[np.float32], step_seconds: float = 0.0, **settings: Any
) -> tuple[Hook, set[Advice]]:
    """A solver that makes one snapshot every half second of its time; gives its hook and all advice it got."""
    with run.hook(**settings) as hook:
        advice: set[Advice] = set()
        for step, snapshot in enumerate(snapshots):
            advice.add(hook(step, 0.5 * step, snapshot))
            time.sleep(step_seconds)
    return hook, advice


def check_holds_exactly(run: Run, snapshots: npt.NDArray[np.float32]) -> None:
    """Close the run and compare what it holds with all snapshots that were sent."""
    run.close()
    assert run.wait(20.0, patience_seconds=5.0)["n_snapshots"] == len(snapshots)
    np.testing.assert_allclose(run.mean(), snapshots.mean(axis=0, dtype=np.float64), rtol=0, atol=1e-5)


def test_every_step_that_is_due_arrives_and_the_last_batch_may_be_short(
    client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots = make_snapshots(61)
    run = client.declare(declaration)
    with run.hook(every=2, batch=8) as hook:
        for step, snapshot in enumerate(snapshots):
            assert hook(step, 0.5 * step, snapshot) == "continue"
    assert (hook.sent_snapshots, hook.unsent_snapshots, hook.lost_snapshots) == (31, 0, 0)
    assert run.next_sequence == 4
    check_holds_exactly(run, snapshots[::2])


def test_fields_may_be_a_list_a_mapping_or_on_their_grid(
    client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots = make_snapshots(20)
    run = client.declare(declaration)
    with run.hook(batch=5) as hook:
        for step, (u, v) in enumerate(snapshots):
            forms: list[Any] = [
                [u, v],
                {"v": v, "u": u},
                np.stack([u, v]).reshape(2, 6, 10),
                np.asfortranarray(np.stack([u, v]).reshape(2, 6, 10)),
            ]
            hook(step, None, forms[step % 4])
    check_holds_exactly(run, snapshots)


def test_the_solver_may_overwrite_its_fields(client: Client, declaration: dict[str, Any], make_snapshots: Make) -> None:
    snapshots = make_snapshots(30)
    run, fields = client.declare(declaration), np.empty((2, N_POINTS))
    with run.hook(batch=4) as hook:
        for step, snapshot in enumerate(snapshots):
            fields[:] = snapshot
            hook(step, None, fields)
            fields[:] = np.nan
    check_holds_exactly(run, snapshots)


@pytest.mark.parametrize("fields", [np.zeros((2, 59)), [np.zeros(N_POINTS)], np.zeros((2, N_POINTS), complex)])
def test_fields_of_another_kind_than_declared_are_the_callers_fault(
    client: Client, declaration: dict[str, Any], fields: Any
) -> None:
    with client.declare(declaration).hook() as hook, pytest.raises((ValueError, TypeError)):
        hook(0, 0.0, fields)


def test_the_advice_turns_when_the_modes_have_settled(
    client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    run = client.declare(declaration)
    deadline = time.monotonic() + 25.0
    with run.hook(batch=64) as hook:
        for step, snapshot in enumerate(np.tile(make_snapshots(4000), (4, 1, 1))):
            if hook(step, None, snapshot) == "may stop" or time.monotonic() > deadline:
                break
            if step % 64 == 63:
                time.sleep(0.02)  # a solver takes its time
    assert hook.advice == "may stop"
    assert run.convergence()["verdict"]["state"] == "settled"


def test_a_service_killed_and_restarted_loses_nothing_and_doubles_nothing(
    mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots = make_snapshots(240)
    with Client(mortal_service.url, timeout=5.0) as client:
        run = client.declare(declaration)
        with run.hook(batch=8) as hook:
            for step, snapshot in enumerate(snapshots):
                hook(step, 0.5 * step, snapshot)
                if step == 100:
                    mortal_service.kill()
                if step == 140:
                    assert hook.advice == "continue"
                    mortal_service.start(wait=False)
                time.sleep(0.002)
        assert (hook.sent_snapshots, hook.lost_snapshots) == (240, 0)
        assert run.next_sequence == 30
        check_holds_exactly(run, snapshots)


@pytest.mark.campaign
@pytest.mark.parametrize("seed", range(3))
def test_killed_again_and_again_at_random_moments(
    mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make, seed: int
) -> None:
    snapshots, rng = make_snapshots(600), np.random.default_rng(seed)
    kills = set(rng.choice(np.arange(20, 580), 5, replace=False).tolist())
    with Client(mortal_service.url, timeout=5.0) as client:
        run = client.declare(declaration)
        with run.hook(batch=4) as hook:
            for step, snapshot in enumerate(snapshots):
                hook(step, 0.5 * step, snapshot)
                if step in kills:
                    time.sleep(float(rng.uniform(0.0, 0.05)))
                    mortal_service.kill()
                    mortal_service.start(wait=bool(rng.integers(2)))
                time.sleep(0.001)
        assert (hook.sent_snapshots, hook.lost_snapshots) == (600, 0)
        check_holds_exactly(run, snapshots)


def test_a_frozen_service_does_not_hold_the_solver_up(
    mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots = make_snapshots(80)
    with Client(mortal_service.url, timeout=10.0) as client:
        run = client.declare(declaration)
        with run.hook(batch=8) as hook:
            mortal_service.freeze()
            started = time.monotonic()
            for step, snapshot in enumerate(snapshots):
                hook(step, 0.5 * step, snapshot)
            assert time.monotonic() - started < 0.5
            mortal_service.thaw()
        assert hook.sent_snapshots == 80
        check_holds_exactly(run, snapshots)


def test_a_lost_receipt_is_asked_for_again(service: Service, declaration: dict[str, Any], make_snapshots: Make) -> None:
    snapshots = make_snapshots(80)
    proxy = CuttingProxy(service.port, n_cuts=2)
    with Client(proxy.url, timeout=5.0) as client:
        run = client.declare(declaration)
        with run.hook(batch=8) as hook:
            for step, snapshot in enumerate(snapshots):
                hook(step, None, snapshot)
        assert proxy.n_cut == 2
        assert (hook.sent_snapshots, hook.lost_snapshots) == (80, 0)
        check_holds_exactly(run, snapshots)
    proxy.close()


def test_a_solver_that_starts_again_from_an_older_state_goes_on(
    client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots = make_snapshots(60)
    run = client.declare(declaration)
    with run.hook(batch=8) as hook:
        for step in range(40):
            hook(step, 0.5 * step, snapshots[step])
    again = client.run(run.id)
    with again.hook(batch=8) as hook:
        for step in range(24, 60):
            hook(step, 0.5 * step * (1.0 + 1e-14), snapshots[step])
    assert (hook.skipped_snapshots, hook.sent_snapshots) == (16, 20)
    check_holds_exactly(again, snapshots)


def test_a_refused_batch_leaves_no_gap(
    client: Client, declaration: dict[str, Any], make_snapshots: Make, caplog: pytest.LogCaptureFixture
) -> None:
    snapshots = make_snapshots(40)
    snapshots[11, 1, 7] = np.inf
    run = client.declare(declaration)
    with pytest.warns(UnsentWarning, match="8 were refused"):
        hook, _ = drive(run, snapshots, batch=8)
    assert "was refused" in caplog.text
    assert (hook.sent_snapshots, hook.lost_snapshots) == (32, 8)
    check_holds_exactly(run, np.concatenate([snapshots[:8], snapshots[16:]]))


@pytest.fixture
def orphan(service: Service, declaration: dict[str, Any]) -> Iterator[Run]:
    """A run whose service is gone: nothing answers at its address any more."""
    relay = CuttingProxy(service.port)
    with Client(relay.url, timeout=2.0) as client:
        run = client.declare(declaration)
        relay.close()
        yield run


def test_a_dead_service_raises_nothing_and_the_end_says_what_is_missing(
    orphan: Run, make_snapshots: Make, caplog: pytest.LogCaptureFixture
) -> None:
    started = time.monotonic()
    with pytest.warns(UnsentWarning, match="20 could not be sent"):
        hook, advice = drive(orphan, make_snapshots(20), batch=8, flush_seconds=0.3)
    assert time.monotonic() - started < 1.5
    assert advice == {"continue"}
    assert "wait in memory" in caplog.text
    assert hook.unsent_snapshots == 20

    with pytest.raises(UnsentError, match="no answer"):
        drive(
            orphan,
            make_snapshots(100),
            0.02,
            batch=1,
            patience_seconds=0.1,
            flush_seconds=0.0,
            raise_errors=True,
        )


def test_memory_is_bounded_while_the_service_is_away(orphan: Run, make_snapshots: Make) -> None:
    snapshots = make_snapshots(64)
    limit = 3 * snapshots[:8].nbytes
    with pytest.warns(UnsentWarning, match="24 could not be sent, 40 were refused or found no room"):
        drive(orphan, snapshots, batch=8, max_waiting_bytes=limit, flush_seconds=0.1)


def test_a_deleted_run_ends_the_posting_but_not_the_solver(
    client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    run = client.declare(declaration)
    run.delete()
    with pytest.warns(UnsentWarning, match="404"):
        hook, advice = drive(run, make_snapshots(20), batch=4)
    assert advice == {"continue"}
    assert hook.lost_snapshots == 20


def test_hooks_leave_no_thread_behind(client: Client, declaration: dict[str, Any]) -> None:
    with client.declare(declaration).hook():
        pass
    time.sleep(0.05)
    assert not [thread for thread in threading.enumerate() if thread.name == "slackwater-hook"]
