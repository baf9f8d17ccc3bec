"""Compiling and running programs of the C and Fortran clients in the tests."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx
import pytest

ROOT = Path(__file__).parents[2]
C_CLIENT = ROOT / "clients" / "c"
C_PROGRAMS = Path(__file__).parent / "c"

# What clients/c/README.md promises to be clean under.
C_WARNINGS = ["-std=c99", "-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Werror"]
COMPILE_SECONDS = 60.0


def needed(tool: str) -> str:
    """Path of a tool; skips the test loudly where it is missing."""
    path = shutil.which(tool)
    if path is None:
        pytest.skip(f"{tool} is not installed here: this part of the C and Fortran clients is NOT tested")
    return path


def compiled(output: Path, sources: Sequence[Path], *, compiler: str = "gcc", flags: Sequence[str] = ()) -> Path:
    """Compile C with warnings as errors."""
    command = [needed(compiler), *C_WARNINGS, "-O1", "-g", *flags, f"-I{C_CLIENT}", "-pthread"]
    run_tool([*command, "-o", str(output), *map(str, sources), "-lm"])
    return output


def run_tool(command: Sequence[str], cwd: Path | None = None) -> None:
    """Run a compiler, and show what it says when it fails."""
    done = subprocess.run(command, cwd=cwd, capture_output=True, text=True, timeout=COMPILE_SECONDS)
    assert done.returncode == 0, f"{' '.join(command)}\n{done.stdout}{done.stderr}"
    assert done.stderr == "", done.stderr


def clean_environment(url: str, **more: str) -> dict[str, str]:
    """The environment without settings of ours but the address of the service."""
    kept = {name: value for name, value in os.environ.items() if not name.startswith("SLACKWATER_")}
    return {**kept, "SLACKWATER_URL": url, **more}


def check_ended_on_advice(url: str, name: str, n_sent: int) -> None:
    """Assert that the newest run of this name is closed, holds what was sent, and was settled at one of its looks.

    The last look may find it unsettled again: a bound near its tolerance may rise above it.
    """
    with httpx.Client(base_url=url, trust_env=False) as http:
        run = next(run for run in http.get("/v1/runs").json()["runs"] if run["declaration"]["name"] == name)
        assert (run["status"], run["n_snapshots"]) == ("closed", n_sent)
        looks = http.get(f"/v1/runs/{run['id']}/convergence/history").json()["evaluations"]
    assert "settled" in {look["verdict"]["state"] for look in looks}


@dataclass(frozen=True)
class Replayed:
    """What the replay program printed and how it ended."""

    code: int
    state: dict[str, Any]
    told: str


class Replay:
    """One run of the replay program."""

    def __init__(self, command: Sequence[str], url: str, **environment: str) -> None:
        self._process = subprocess.Popen(
            command,
            env=clean_environment(url, **environment),
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )

    def result(self, timeout: float = 60.0) -> Replayed:
        """Wait for its end."""
        try:
            printed, told = self._process.communicate(timeout=timeout)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.communicate()
            raise
        assert printed, f"the program ended with {self._process.returncode}:\n{told}"
        return Replayed(self._process.returncode, json.loads(printed), told)
