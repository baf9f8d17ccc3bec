"""Running it for real: readiness as the service manager sees it, the unit file, and the batch job."""

from __future__ import annotations

import os
import re
import shutil
import socket
import subprocess
import sys
from pathlib import Path

import pytest

from tests.service.serving import RunningService

pytestmark = pytest.mark.timeout(120)  # a hang is a failure, and shows its stacks

DOCKER = Path(__file__).parents[2] / "docker"
# What a solver of the user does: two patterns of independent strengths, posted or written as files.
SOLVER = """
import pathlib, sys, time
import numpy as np
rng = np.random.default_rng(3)
patterns = rng.normal(size=(2, 60))
def snapshots(n):
    return (rng.normal(size=(n, 2)) * [3.0, 1.0]) @ patterns + 0.05 * rng.normal(size=(n, 60))
"""
POSTING = (
    SOLVER
    + """
from slackwater_client import Client
run = Client().declare({"name": "job", "n_points": 60, "fields": [{"name": "p"}], "retained_rank": 8,
    "criterion": {"n_modes": 2}})
run.post(snapshots(1500), 0)
print(run.close()["verdict"]["state"], flush=True)
sys.exit(7)
"""
)
WRITING = (
    SOLVER
    + """
folder, stop = map(pathlib.Path, sys.argv[1:])
for k in range(3000):
    if stop.exists():
        print(f"stopped after step {k}: {stop.read_text().strip()}", flush=True)
        break
    if k % 20 == 0:
        with open(folder / f"step{k}.part", "wb") as file:
            np.save(file, snapshots(100).astype("f4"))
        (folder / f"step{k}.part").rename(folder / f"step{k}.npy")
    time.sleep(0.01)
else:
    sys.exit("nobody left the stop file")
"""
)


def test_the_service_manager_is_told_when_it_is_ready_and_when_it_stops(tmp_path: Path) -> None:
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as manager:
        manager.bind(str(tmp_path / "notify"))
        manager.settimeout(10.0)
        with RunningService(tmp_path / "data", environment={"NOTIFY_SOCKET": str(tmp_path / "notify")}) as service:
            assert manager.recv(100) == b"READY=1"
            assert service.client.get("/readyz").status_code == 200
        assert manager.recv(100) == b"STOPPING=1"


def test_without_a_manager_that_listens_it_runs_all_the_same(tmp_path: Path) -> None:
    with RunningService(tmp_path / "data", environment={"NOTIFY_SOCKET": "@nobody-listens-here"}) as service:
        assert service.client.get("/readyz").status_code == 200


@pytest.mark.skipif(shutil.which("systemd-analyze") is None, reason="systemd-analyze is not installed here")
def test_the_unit_is_one_that_systemd_takes(tmp_path: Path) -> None:
    text = (DOCKER / "slackwater.service").read_text()
    unit = tmp_path / "slackwater.service"
    unit.write_text(re.sub(r"^ExecStart=\S+", "ExecStart=/bin/true", text, flags=re.MULTILINE))
    done = subprocess.run(["systemd-analyze", "verify", str(unit)], capture_output=True, text=True, timeout=30)
    told = [line for line in done.stderr.splitlines() if unit.name in line]
    assert not told, done.stderr


def job(tmp_path: Path, *solver: str, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run the batch job as plain shell, with the commands of this environment."""
    commands = Path(sys.executable).parent
    clean = {name: value for name, value in os.environ.items() if not name.startswith("SLACKWATER_")}
    return subprocess.run(
        ["bash", str(DOCKER / "batch-job.sh"), sys.executable, *solver],
        cwd=tmp_path,
        env={**clean, "PATH": f"{commands}:{clean['PATH']}", **environment},
        capture_output=True,
        text=True,
        timeout=100,
    )


def test_the_batch_job_serves_a_solver_that_posts_and_ends_with_its_code(tmp_path: Path) -> None:
    done = job(tmp_path, "-c", POSTING)
    assert done.returncode == 7, done.stdout + done.stderr
    assert "settled" in done.stdout
    assert (tmp_path / "slackwater-data" / "registry.sqlite").exists()
    address = re.search(r"http://127.0.0.1:(\d+)", done.stdout)
    assert address is not None
    with socket.socket() as gone:
        assert gone.connect_ex(("127.0.0.1", int(address[1]))) != 0


@pytest.mark.campaign
def test_the_batch_job_with_a_token_beyond_loopback(tmp_path: Path) -> None:
    done = job(tmp_path, "-c", POSTING.replace("Client()", "Client('http://127.0.0.1:' + PORT)").replace(
        "run = ", "import os; PORT = os.environ['SLACKWATER_URL'].rsplit(':', 1)[1]\nrun = "
    ), SLACKWATER_HOST="0.0.0.0")  # fmt: skip
    assert done.returncode == 7, done.stdout + done.stderr


@pytest.mark.campaign
def test_the_batch_job_stops_a_closed_solver_by_its_stop_file(tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "run.json").write_text('{"retained_rank": 8, "criterion": {"n_modes": 2}, "name": "closed solver"}')
    done = job(
        tmp_path, "-c", WRITING, "out", "STOP", WATCH_FOLDER="out", DECLARATION="run.json", STOP_FILE="STOP"
    )  # fmt: skip
    log = (tmp_path / "slackwater-data.log").read_text()
    assert done.returncode == 0, done.stdout + done.stderr + log
    assert "settled: the run may stop" in done.stdout
    assert not list((tmp_path / "out").glob("step*.npy")), "all that was written was posted in the end"
