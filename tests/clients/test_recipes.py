"""The recipes of the README files run as they stand."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

from tests.clients.conftest import Service

CLIENTS = Path(__file__).parents[2] / "clients"


def _blocks(path: Path, language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", path.read_text(), re.MULTILINE | re.DOTALL)


@pytest.mark.skipif(shutil.which("curl") is None, reason="curl is not installed here")
def test_the_curl_recipes_lead_to_settled_modes(service: Service, tmp_path: Path) -> None:
    script = "set -eu\n" + "\n".join(_blocks(CLIENTS / "README.md", "sh"))
    done = subprocess.run(
        ["bash", "-c", script],
        cwd=tmp_path,
        env={
            **os.environ,
            "SLACKWATER_URL": service.url,
            "NO_PROXY": "127.0.0.1",
            "PATH": f"{Path(sys.executable).parent}:{os.environ['PATH']}",  # where the command slackwater is
        },
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert '"sequence":0' in done.stdout.replace(" ", "")
    assert "settled" in done.stdout
    assert "(2, 1, 500)" in done.stdout
    assert (tmp_path / "STOP").exists()
    assert (tmp_path / "rig" / "done" / "burst1.npy").exists()
    assert "640 snapshots in all" in done.stdout
    assert (tmp_path / "results.nc").read_bytes()[:3] == b"CDF"


def _solver() -> Iterator[tuple[int, float, npt.NDArray[np.float64], npt.NDArray[np.float64]]]:
    """800 steps of 30 x 40 points, as the README takes for granted."""
    rng = np.random.default_rng(9)
    for step in range(800):
        yield step, 0.01 * step, rng.normal(size=(30, 40)), rng.normal(size=(30, 40))


def test_the_python_recipes_run(
    service: Service, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("SLACKWATER_URL", service.url)
    for block in _blocks(CLIENTS / "python" / "README.md", "python"):
        names: dict[str, object] = {"solver": _solver}
        exec(block, names)
    assert "air intake, 40 percent flap" in capsys.readouterr().out
