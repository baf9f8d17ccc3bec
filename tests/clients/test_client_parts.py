"""One hook for each rank: what the service holds is what all ranks sent together, each snapshot once."""

from __future__ import annotations

import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from typer.testing import CliRunner

from service.cli import app
from service.commands_status import late_parts
from slackwater_client import Client, ConflictError, Hook, Run, UnsentWarning
from tests.clients.building import clean_environment
from tests.clients.conftest import N_POINTS, Service

Make = Callable[..., npt.NDArray[np.float32]]

BOUNDS = [0, 7, 30, 31, N_POINTS]
PARTS = [{"start": start, "stop": stop} for start, stop in pairwise(BOUNDS)]


@pytest.fixture
def in_parts(declaration: dict[str, Any]) -> dict[str, Any]:
    return {**declaration, "parts": PARTS}


def share(part: int, snapshots: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    return snapshots[..., BOUNDS[part] : BOUNDS[part + 1]]


def drive(run: Run, part: int, snapshots: npt.NDArray[np.float32], step_seconds: float = 0.0, first: int = 0) -> Hook:
    """One rank of a solver, from step ``first`` on."""
    with run.part(part).hook(batch=8) as hook:
        for step in range(first, len(snapshots)):
            hook(step, 0.5 * step, share(part, snapshots[step]))
            time.sleep(step_seconds)
    return hook


def check_holds_exactly(run: Run, whole: Run, snapshots: npt.NDArray[np.float32]) -> None:
    """Close the run; it has the bits of a run of whole snapshots."""
    whole.post(snapshots, times=0.5 * np.arange(len(snapshots)))
    for one in (run, whole):
        one.close()
        assert one.wait(20.0, patience_seconds=5.0)["n_snapshots"] == len(snapshots)
    np.testing.assert_array_equal(run.modes(), whole.modes())
    np.testing.assert_array_equal(run.mean(), whole.mean())


def test_posting_each_part(client: Client, in_parts: dict[str, Any], make_snapshots: Make) -> None:
    snapshots, run = make_snapshots(10), client.declare(in_parts)
    receipts = [run.post_part(part, share(part, snapshots), 0) for part in (2, 0, 3, 1)]
    assert [receipt.complete for receipt in receipts] == [False, False, False, True]
    assert [receipt.first_snapshot for receipt in receipts] == [None, None, None, 0]
    assert run.post_part(2, share(2, snapshots), 0).duplicate
    with pytest.raises(ConflictError):
        run.post_part(2, share(2, snapshots) + 1.0, 0)
    with pytest.raises(ConflictError):
        run.post(snapshots, 0)
    assert run.part(1).post(share(1, snapshots)).sequence == 1
    with pytest.raises(ConflictError, match="hold 10"):
        run.part(0).post(share(0, snapshots)[:3])
    assert [run.part(part).next_sequence for part in range(4)] == [1, 2, 1, 1]
    status = run.refresh()["parts"]
    assert (status["n_parts"], status["n_late"]) == (4, 3)
    assert status["slowest"][0]["n_repeats"] + status["slowest"][1]["n_repeats"] == 1


def test_parts_that_are_not_declared(
    client: Client, declaration: dict[str, Any], in_parts: dict[str, Any], make_snapshots: Make
) -> None:
    run, whole = client.declare(in_parts), client.declare(declaration)
    with pytest.raises(ValueError, match="parts 0 to 3, there is no part 4"):
        run.part(4)
    with pytest.raises(ValueError, match="without parts"):
        whole.part(0)
    with pytest.raises(ConflictError):
        whole.post_part(0, make_snapshots(2), 0)


def test_four_ranks_side_by_side(
    client: Client, declaration: dict[str, Any], in_parts: dict[str, Any], make_snapshots: Make
) -> None:
    """Ranks of different speed, a last batch that is short."""
    snapshots, run = make_snapshots(61), client.declare(in_parts)
    with ThreadPoolExecutor(4) as pool:
        hooks = list(pool.map(lambda part: drive(run, part, snapshots, 0.002 * part), range(4)))
    assert {(hook.sent_snapshots, hook.lost_snapshots) for hook in hooks} == {(61, 0)}
    check_holds_exactly(run, client.declare(declaration), snapshots)


RANK = """
import sys, time
import numpy as np
from slackwater_client import Client
run_id, part, path = sys.argv[1], int(sys.argv[2]), sys.argv[3]
with Client() as client, client.run(run_id).part(part).hook(batch=8) as hook:
    for step, snapshot in enumerate(np.load(path)):
        hook(step, 0.5 * step, snapshot)
        print(hook.sent_snapshots, flush=True)
        time.sleep(0.005)
"""


def test_a_rank_is_killed_and_starts_again(
    client: Client,
    service: Service,
    declaration: dict[str, Any],
    in_parts: dict[str, Any],
    make_snapshots: Make,
    tmp_path: Path,
) -> None:
    """It takes up an older state of its own, and all others have gone on: nothing is lost, nothing counts twice."""
    snapshots, run, part = make_snapshots(80), client.declare(in_parts), 2
    np.save(tmp_path / "rank.npy", share(part, snapshots))
    command = [sys.executable, "-c", RANK, run.id, str(part), str(tmp_path / "rank.npy")]
    rank = subprocess.Popen(command, env=clean_environment(service.url), stdout=subprocess.PIPE, text=True)
    assert rank.stdout is not None
    for line in rank.stdout:
        if int(line) >= 16:
            rank.send_signal(signal.SIGKILL)
    rank.stdout.close()
    assert rank.wait(10) == -signal.SIGKILL
    with ThreadPoolExecutor(3) as pool:
        list(pool.map(lambda other: drive(run, other, snapshots), (0, 1, 3)))
    status = run.refresh()["parts"]
    stored = run.part(part).next_sequence
    assert 2 <= stored < 10
    assert (status["n_late"], status["slowest"][0]["part"], status["slowest"][1]["n_waiting"]) == (1, part, 10 - stored)
    told = CliRunner().invoke(app, ["status", run.id, "--url", service.url], env={"COLUMNS": "200"}).output
    assert f"1 of 4 parts are late ({part}): batch {stored} waits for them since" in " ".join(told.split())
    hook = drive(run, part, snapshots, first=5)
    assert late_parts(run.refresh()) is None
    assert hook.skipped_snapshots == 8 * stored - 5
    check_holds_exactly(run, client.declare(declaration), snapshots)


def test_a_restarted_rank_cuts_its_batches_as_the_others_did(
    client: Client, declaration: dict[str, Any], in_parts: dict[str, Any], make_snapshots: Make
) -> None:
    """The others ended with a short batch, and part 1 was killed before it could."""
    snapshots, run = make_snapshots(35), client.declare(in_parts)
    for part in range(4):
        drive(run, part, snapshots[: 16 if part == 1 else 19])
    for part in range(4):
        drive(run, part, snapshots, first=10)
    check_holds_exactly(run, client.declare(declaration), snapshots)


def test_the_service_is_killed_under_four_ranks(
    mortal_service: Service, declaration: dict[str, Any], in_parts: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots = make_snapshots(160)
    with Client(mortal_service.url) as client:
        run = client.declare(in_parts)
        killer = threading.Timer(0.4, lambda: (mortal_service.kill(), mortal_service.start(wait=False)))
        killer.start()
        with ThreadPoolExecutor(4) as pool:
            hooks = list(pool.map(lambda part: drive(run, part, snapshots, 0.005), range(4)))
        killer.join()
        assert {(hook.sent_snapshots, hook.lost_snapshots) for hook in hooks} == {(160, 0)}
        check_holds_exactly(run, client.declare(declaration), snapshots)


def test_a_part_stops_at_a_refused_batch(client: Client, in_parts: dict[str, Any], make_snapshots: Make) -> None:
    """What follows a hole would stand beside other times of the other parts."""
    snapshots, run = make_snapshots(32), client.declare(in_parts)
    snapshots[9, 0, 35] = np.nan
    with pytest.warns(UnsentWarning, match="not-finite|NaN|nan"):
        hook = drive(run, 3, snapshots, 0.02)
    assert (hook.sent_snapshots, hook.lost_snapshots) == (8, 24)
    assert run.part(3).next_sequence == 1


def test_a_part_sends_nothing_after_a_batch_that_found_no_room(
    mortal_service: Service, in_parts: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots = make_snapshots(64)
    with Client(mortal_service.url) as client:
        run = client.declare(in_parts)
        hook = run.part(0).hook(batch=8, max_waiting_bytes=1000)  # two batches of 448 bytes
        mortal_service.freeze()
        try:
            for step in range(32):
                hook(step, None, share(0, snapshots[step]))
        finally:
            mortal_service.thaw()
        deadline = time.monotonic() + 20
        while hook.unsent_snapshots and time.monotonic() < deadline:
            time.sleep(0.02)
        for step in range(32, 64):
            hook(step, None, share(0, snapshots[step]))
        assert (hook.sent_snapshots, hook.lost_snapshots) == (16, 48)
        assert run.part(0).next_sequence == 2
        with pytest.warns(UnsentWarning):
            hook.close()
