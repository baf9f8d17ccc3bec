"""The MPI examples: four ranks stop at the same step, on the verdict."""

from __future__ import annotations

import importlib.util
import re
import shutil
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

import pytest

from tests.clients.building import ROOT, check_ended_on_advice, clean_environment, needed, run_tool
from tests.clients.conftest import Service

LONGEST = {"c": 400_000, "python": 100_000}  # steps, as the examples have them
RUN_SECONDS = 100.0


def on_ranks(command: Sequence[str], url: str, cwd: Path) -> str:
    """Run a command on four ranks, also where there are fewer cores, and as root, as in a container."""
    mpiexec = needed("mpiexec")
    version = subprocess.run([mpiexec, "--version"], capture_output=True, text=True, timeout=20).stdout
    shared = ["--oversubscribe", "--mca", "mpi_yield_when_idle", "1"] if "Open" in version else []
    environment = clean_environment(url, OMPI_ALLOW_RUN_AS_ROOT="1", OMPI_ALLOW_RUN_AS_ROOT_CONFIRM="1")
    done = subprocess.run(
        [mpiexec, *shared, "-n", "4", *command],
        cwd=cwd,
        env=environment,
        capture_output=True,
        text=True,
        timeout=RUN_SECONDS,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


def check_stopped_together(printed: str, longest: int, url: str, name: str) -> None:
    """All four ranks made the same steps, fewer than the longest run, and the service has what rank 0 sent."""
    steps = {rank: int(count) for rank, count in re.findall(r"rank (\d): (\d+) steps", printed)}
    assert sorted(steps) == ["0", "1", "2", "3"]
    assert len(set(steps.values())) == 1, steps
    assert steps["0"] < longest
    sent = re.search(r"(\d+) snapshots sent", printed)
    assert sent is not None, printed
    check_ended_on_advice(url, name, int(sent[1]))


def test_ranks_in_c_stop_together(service: Service, tmp_path: Path) -> None:
    needed("mpicc")
    for folder in ("c", "mpi"):
        shutil.copytree(ROOT / "clients" / folder, tmp_path / folder)
    run_tool([needed("make"), "-s"], tmp_path / "mpi")
    printed = on_ranks(["./mixing_duct_mpi"], service.url, tmp_path / "mpi")
    check_stopped_together(printed, LONGEST["c"], service.url, "mixing duct on ranks")


@pytest.mark.skipif(
    importlib.util.find_spec("mpi4py") is None, reason="mpi4py is not installed here: the MPI example is NOT tested"
)
def test_ranks_in_python_stop_together(service: Service, tmp_path: Path) -> None:
    script = ROOT / "clients" / "mpi" / "roof_membrane_mpi.py"
    printed = on_ranks([sys.executable, str(script)], service.url, tmp_path)
    check_stopped_together(printed, LONGEST["python"], service.url, "roof membrane on ranks")
