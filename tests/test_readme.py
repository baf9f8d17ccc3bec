"""The README's examples run as they stand, against a real service."""

from __future__ import annotations

import gc
import os
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from slackwater_client import Client
from tests.clients.conftest import Service

README = (Path(__file__).parents[1] / "README.md").read_text()


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)


def solver() -> Iterator[tuple[int, float, np.ndarray, np.ndarray]]:
    """A travelling pair of waves in noise on 20 x 30 points; the run ends by the break or by its own end."""
    rng = np.random.default_rng(1)
    x = np.arange(30) / 30
    for step in range(60_000):
        wave = 2 * np.cos(2 * np.pi * x - 0.3 * step / 10 + np.zeros((20, 1)))
        yield step, 1e-3 * step, wave + rng.normal(size=(20, 30)), rng.normal(size=(20, 30))


def rig(incidence: int) -> Iterator[np.ndarray]:
    """Batches of 100 scans of 64 taps, two patterns in noise."""
    rng = np.random.default_rng(incidence)
    patterns = np.linalg.qr(rng.normal(size=(64, 2)))[0].T * [[30.0], [10.0]]
    for _ in range(40):
        yield rng.normal(size=(100, 2)) @ patterns + 0.5 * rng.normal(size=(100, 64))


@pytest.mark.parametrize("example", blocks("python"), ids=["hook", "campaign", "in process"])
def test_python_examples(
    service: Service, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], example: str
) -> None:
    monkeypatch.setenv("SLACKWATER_URL", service.url)
    names: dict[str, object] = {"solver": solver, "rig": rig}
    exec(example, names)
    gc.collect()  # the examples leave their client to the end of the script
    if "hook" in example:
        with Client(service.url) as client:
            (run,) = (run for run in client.runs() if run.name == "mixing duct, half load")
            assert run.convergence()["verdict"]["state"] == "settled"
        assert names["step"] < 59_999  # type: ignore[operator]
    if "rig" in example:
        assert capsys.readouterr().out.count("settled") >= 2


def test_the_polling_example(service: Service, tmp_path: Path) -> None:
    client = Client(service.url)
    run = client.declare(
        {
            "name": "panel",
            "n_points": 64,
            "fields": [{"name": "p"}],
            "retained_rank": 8,
            "criterion": {"n_modes": 2, "max_angle_deg": 20},
        }
    )
    for batch in rig(3):
        run.post(batch)
    run.close()
    client.close()
    (example,) = (block for block in blocks("sh") if "slackwater wait" in block)
    path = f"{Path(sys.executable).parent}:{os.environ['PATH']}"
    environment = {**os.environ, "SLACKWATER_URL": service.url, "RUN": run.id, "PATH": path, "NO_PROXY": "127.0.0.1"}
    done = subprocess.run(
        ["bash", "-ec", example], cwd=tmp_path, env=environment, capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 0, done.stderr
    assert "settled: the next case may start" in done.stdout
    assert '"settled"' in (tmp_path / "convergence.json").read_text()


def test_both_commands_set_up_the_same_environment() -> None:
    first, second = (block.strip() for block in blocks("sh")[:2])
    assert first.endswith(".venv/bin/slackwater demo")
    assert second.endswith(".venv/bin/python -m pytest")
