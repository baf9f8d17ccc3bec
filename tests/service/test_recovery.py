"""What was acknowledged survives any end of the process, and counts once; damage is named, never hidden."""

from __future__ import annotations

import signal
import subprocess
import sys
import threading
import time
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from streaming import Convergence, SnapshotStream
from tests.service.serving import RunningService, check_problem, declaration, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks

BATCH = 7


def unbroken(n: int) -> SnapshotStream:
    stream = SnapshotStream(declaration())
    stream.absorb(snapshots(0, n))
    stream.close()
    return stream


def post(service: RunningService, run: str, sequences: range) -> None:
    for sequence in sequences:
        answer = service.put(run, sequence, snapshots(sequence * BATCH, (sequence + 1) * BATCH))
        assert answer.status_code in (200, 201), answer.text


def post_until_cut(service: RunningService, run: str, sequence: int) -> int:
    """Post one batch after another until the connection breaks; return the first number without a receipt."""
    while True:
        try:
            post(service, run, range(sequence, sequence + 1))
        except httpx.TransportError:
            return sequence
        sequence += 1


def check_report(shown: dict[str, Any], report: Convergence) -> None:
    """Equal bit for bit, but for the spectra: coefficients of a reloaded stream are equal up to round-off."""
    expected = report.model_dump(mode="json")
    for got, wanted in zip(shown["modes"], expected["modes"], strict=True):
        for name in ("peak_frequency", "strouhal"):
            value, expected_value = got.pop(name), wanted.pop(name)
            assert value == expected_value or value == pytest.approx(expected_value, rel=1e-9)
    assert shown == expected


def check_same(service: RunningService, run: str, n: int) -> None:
    """Close the run; everything is bitwise as if it had never been broken."""
    closed = service.client.post(f"/v1/runs/{run}/close").json()
    assert closed["status"] == "closed", closed
    assert closed["n_applied"] == n
    direct = unbroken(n)
    modes = service.array(f"/v1/runs/{run}/modes")
    np.testing.assert_array_equal(modes, direct.modes(len(modes)))
    np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/mean"), direct.mean())
    np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/singular-values"), direct.singular_values())
    check_report(service.client.get(f"/v1/runs/{run}/convergence").json(), direct.convergence())
    history = service.client.get(f"/v1/runs/{run}/convergence/history").json()["evaluations"]
    for shown, report in zip(history, direct.history, strict=True):
        check_report(shown, report)
    assert not list((service.data / "runs" / run / "journal").iterdir())


def test_kill_and_restart_give_the_same_bits(tmp_path: Path) -> None:
    """Killed twice in mid-run, the second time while batches are being sent and applied."""
    data = tmp_path / "data"
    with RunningService(data) as service:
        run = service.declare()
        post(service, run, range(12))
        service.applied(run, 72)
        service.end(signal.SIGKILL)
    with RunningService(data) as service:
        assert service.client.get(f"/v1/runs/{run}").json()["next_sequence"] == 12
        killer = threading.Timer(0.15, service.process.kill)
        killer.start()
        acknowledged = post_until_cut(service, run, 12)
        killer.join()
        service.process.wait(5)
    with RunningService(data) as service:
        following = service.client.get(f"/v1/runs/{run}").json()["next_sequence"]
        assert acknowledged <= following <= acknowledged + 1  # the last one may be stored and not answered
        last = max(following, 20) + 5
        post(service, run, range(acknowledged - 3, last))  # overlaps what is stored
        check_same(service, run, last * BATCH)


def test_restart_without_a_checkpoint(tmp_path: Path) -> None:
    data = tmp_path / "data"
    with RunningService(data) as service:
        run = service.declare()
        service.put(run, 0, snapshots(0, 5))
        service.put(run, 2, snapshots(9, 12))
        service.end(signal.SIGKILL)
    draft = data / "runs" / run / "journal" / "0123.part"
    stray = data / "runs" / run / "journal" / f"{1:015d}.npy"
    draft.write_bytes(b"torn")
    stray.write_bytes(b"renamed, never acknowledged")
    with RunningService(data) as service:
        assert not draft.exists()
        assert not stray.exists()
        assert service.put(run, 1, snapshots(5, 9)).json()["duplicate"] is False
        check_same(service, run, 12)


def test_a_damaged_checkpoint_is_made_again(tmp_path: Path) -> None:
    data = tmp_path / "data"
    with RunningService(data, environment={"SLACKWATER_MAX_JOURNAL_BYTES": "1024"}) as service:  # at each block
        run = service.declare()
        for sequence in range(20):
            service.put(
                run,
                sequence,
                snapshots(sequence * BATCH, (sequence + 1) * BATCH),
                headers={"Prefer": "wait=10"},
            )
        numbers = [
            one["n_snapshots"] for one in service.client.get(f"/v1/runs/{run}/checkpoints").json()["checkpoints"]
        ]
        assert len(numbers) >= 2
    newest = data / "runs" / run / "checkpoints" / f"{numbers[0]:012d}"
    victim = max((path for path in newest.rglob("*") if path.is_file()), key=lambda path: path.stat().st_size)
    spoiled = bytearray(victim.read_bytes())
    spoiled[len(spoiled) // 2] ^= 1
    victim.write_bytes(spoiled)
    with RunningService(data) as service:
        post(service, run, range(20, 22))
        check_same(service, run, 22 * BATCH)
        assert victim.name in service.log
    assert list(newest.parent.glob("*.damaged-*"))


def test_damaged_batches_are_named(tmp_path: Path) -> None:
    """A flipped bit, a cut end and a missing file: each fails its own run, by name, and no other."""
    data = tmp_path / "data"
    with RunningService(data) as service:
        runs = {damage: service.declare() for damage in ("flip", "cut", "remove", "none")}
        for run in runs.values():
            post(service, run, range(2))
        service.end(signal.SIGKILL)
    files = {damage: data / "runs" / run / "journal" / f"{1:015d}.npy" for damage, run in runs.items()}
    body = bytearray(files["flip"].read_bytes())
    body[-3] ^= 1
    files["flip"].write_bytes(body)
    files["cut"].write_bytes(body[:-40])
    files["remove"].unlink()
    with RunningService(data) as service:
        for damage in ("flip", "cut", "remove"):
            failed = wait_for_failure(service, runs[damage])
            assert files[damage].name in failed["reason"]
            check_problem(service.put(runs[damage], 2, snapshots(14, 21)), 409, "run-failed")
        check_same(service, runs["none"], 14)
    assert files["flip"].exists()  # what is damaged is kept for people to look at
    assert files["cut"].exists()


def wait_for_failure(service: RunningService, run: str) -> dict[str, Any]:
    deadline = time.monotonic() + 20
    while (resource := service.client.get(f"/v1/runs/{run}").json())["status"] != "failed":
        assert time.monotonic() < deadline, resource
        time.sleep(0.02)
    return resource


def test_a_second_service_is_refused(service: RunningService) -> None:
    command = [sys.executable, "-m", "service", "serve", "--port", "0", "--data-directory", str(service.data)]
    second = subprocess.run(command, capture_output=True, text=True, timeout=30, check=False)
    assert second.returncode == 1
    assert f"in use by another service (process {service.process.pid})" in second.stderr
    assert service.client.get("/readyz").status_code == 200


def test_sigterm_with_open_streams_ends_soon(tmp_path: Path) -> None:
    with RunningService(tmp_path / "data") as service:
        run = service.declare()
        opened = threading.Event()
        ended = threading.Event()

        def listen() -> None:
            with service.client.stream("GET", f"/v1/runs/{run}/events?after=0") as stream:
                for _ in stream.iter_lines():
                    opened.set()
            ended.set()

        held = threading.Thread(
            target=service.client.get, args=(f"/v1/runs/{run}/convergence?wait_for=settled&timeout=60",)
        )
        threads = [threading.Thread(target=listen), held]
        for thread in threads:
            thread.start()
        assert opened.wait(5)
        time.sleep(0.1)
        assert service.end(signal.SIGTERM) < 5.0
        for thread in threads:
            thread.join(5)
        assert ended.is_set()
        assert "Traceback" not in service.log


def test_sigterm_under_load_loses_nothing(tmp_path: Path) -> None:
    data = tmp_path / "data"
    with RunningService(data) as service:
        run = service.declare()
        stopper = threading.Timer(0.5, service.process.terminate)
        stopper.start()
        acknowledged = post_until_cut(service, run, 0)
        assert service.end(signal.SIGTERM) < 5.0
        stopper.join()
        assert "Traceback" not in service.log
    with RunningService(data) as service:
        following = service.client.get(f"/v1/runs/{run}").json()["next_sequence"]
        assert acknowledged <= following <= acknowledged + 1
        post(service, run, range(following, following + 2))
        check_same(service, run, (following + 2) * BATCH)
        final = service.client.get(f"/v1/runs/{run}/convergence").json()
    with RunningService(data) as service:
        assert service.client.get(f"/v1/runs/{run}/convergence").json() == final


def test_runs_that_rest_give_way_and_come_back(tmp_path: Path) -> None:
    """Memory for one run only: two runs in turn reach the bits of runs that had it to themselves."""
    points = 2000  # two fields, 53 rows of 4 bytes and one of 8: 0.9 MB of the 1 MiB there is
    wide = {"n_points": points, "grid": {"kind": "none"}}
    rows = np.random.default_rng(3).standard_normal((2, 60, 2, points)).astype(np.float32)
    with RunningService(tmp_path / "data", environment={"SLACKWATER_MEMORY_BYTES": str(2**20)}) as service:
        runs = [service.declare(**wide) for _ in range(2)]
        for sequence in range(4):
            for run, batch in zip(runs, rows[:, sequence * 15 : (sequence + 1) * 15], strict=True):
                assert service.put(run, sequence, batch, headers={"Prefer": "wait=10"}).status_code == 201
        for run, own in zip(runs, rows, strict=True):
            assert service.client.post(f"/v1/runs/{run}/close").json()["status"] == "closed"
            direct = SnapshotStream(declaration(**wide))
            direct.absorb(own)
            direct.close()
            np.testing.assert_array_equal(service.array(f"/v1/runs/{run}/modes?n=3"), direct.modes(3))
