"""The service killed in the middle of the demonstration's solver run: the solver goes on and the result is the same."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from slackwater_client import Client, Run
from tests.clients.conftest import Service

N_SNAPSHOTS = 240  # fewer than it takes to settle, so that both runs end at the same snapshot
KILL_AT = 100


@pytest.mark.campaign
def test_a_killed_and_restarted_service_ends_with_the_same_bits(tmp_path: Path) -> None:
    service = Service(tmp_path / "data")
    service.start()
    try:
        with Client(service.url) as client:
            solve(service, client, "unbroken", kill=False)
            solve(service, client, "broken", kill=True)
            runs = {run.name: run for run in client.runs()}
            unbroken, broken = runs["unbroken"], runs["broken"]
            for run in (unbroken, broken):
                assert run.convergence()["n_snapshots"] == N_SNAPSHOTS
            np.testing.assert_array_equal(broken.modes(), unbroken.modes())
            np.testing.assert_array_equal(broken.mean(), unbroken.mean())
            np.testing.assert_array_equal(broken.singular_values(), unbroken.singular_values())
            assert broken.convergence() == unbroken.convergence()
    finally:
        service.stop()


def solve(service: Service, client: Client, name: str, kill: bool) -> None:
    command = [sys.executable, "-m", "service.demo.intake", "--url", service.url, "--run-name", name]
    solver = subprocess.Popen([*command, "--max-snapshots", str(N_SNAPSHOTS)])
    try:
        if kill:
            wait_for_snapshots(client, name, solver)
            service.kill()
            time.sleep(1.0)
            service.start()
        assert solver.wait(120) == 0
    finally:
        if solver.poll() is None:
            solver.kill()
            solver.wait()


def wait_for_snapshots(client: Client, name: str, solver: subprocess.Popen[bytes]) -> None:
    """Until the run holds `KILL_AT` snapshots."""
    deadline = time.monotonic() + 90
    while time.monotonic() < deadline and solver.poll() is None:
        if any(posted(run) >= KILL_AT for run in client.runs() if run.name == name):
            return
        time.sleep(0.1)
    raise AssertionError("the solver posted too little")


def posted(run: Run) -> int:
    return int(run.refresh()["n_snapshots"])
