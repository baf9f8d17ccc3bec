"""A real service in its own process, and small data to post to it."""

from __future__ import annotations

import io
import os
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Self

import httpx
import numpy as np

START_SECONDS = 30.0
NPY = {"Content-Type": "application/x-npy"}


class RunningService:
    """``python -m service serve`` on a free loopback port; ends with the block, by its process id."""

    def __init__(self, data: Path, *flags: str, environment: Mapping[str, str] | None = None) -> None:
        self.data = data
        command = [sys.executable, "-m", "service", "serve", "--port", "0", "--data-directory", str(data), *flags]
        self._log = (data.parent / f"{data.name}.log").open("ab")
        clean = {name: value for name, value in os.environ.items() if not name.startswith("SLACKWATER_")}
        self.process = subprocess.Popen(
            command, stdout=subprocess.PIPE, stderr=self._log, env={**clean, **(environment or {})}
        )
        assert self.process.stdout is not None
        line = self.process.stdout.readline().decode()
        assert line.startswith("Slackwater listens on "), (line, self.log)
        self.url = line.split()[-1]
        self.client = httpx.Client(base_url=self.url, timeout=30.0)
        self._wait_ready()

    def _wait_ready(self) -> None:
        deadline = time.monotonic() + START_SECONDS
        while time.monotonic() < deadline:
            try:
                if self.client.get("/readyz").status_code == 200:
                    return
            except httpx.TransportError:
                time.sleep(0.02)
        raise AssertionError(f"not ready after {START_SECONDS} s: {self.log}")

    @property
    def log(self) -> str:
        return Path(self._log.name).read_text()

    def end(self, sig: signal.Signals = signal.SIGTERM, seconds: float = 10.0) -> float:
        """Signal the process and wait; return how long it took in seconds."""
        began = time.monotonic()
        if self.process.poll() is None:
            self.process.send_signal(sig)
        self.process.wait(seconds)
        return time.monotonic() - began

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.client.close()
        try:
            self.end()
        finally:
            if self.process.poll() is None:
                self.process.kill()
                self.process.wait(5.0)
            assert self.process.stdout is not None
            self.process.stdout.close()
            self._log.close()

    # -- what tests do often ------------------------------------------------------------------------------

    def declare(self, **changes: Any) -> str:
        answer = self.client.post("/v1/runs", json=declaration(**changes))
        assert answer.status_code == 201, answer.text
        return str(answer.json()["id"])

    def put(self, run: str, sequence: int, batch: np.ndarray, **options: Any) -> httpx.Response:
        headers = NPY | options.pop("headers", {})
        path = f"/v1/runs/{run}/batches/{sequence}"
        return self.client.put(path, content=npy(batch), headers=headers, **options)

    def applied(self, run: str, n_absorbed: int, seconds: float = 20.0) -> dict[str, Any]:
        """Wait until so many snapshots are applied; return the run."""
        deadline = time.monotonic() + seconds
        while time.monotonic() < deadline:
            resource: dict[str, Any] = self.client.get(f"/v1/runs/{run}").json()
            if resource["n_applied"] >= n_absorbed or resource["status"] == "failed":
                return resource
            time.sleep(0.02)
        raise AssertionError(f"{n_absorbed} snapshots not applied after {seconds} s: {resource}")

    def array(self, path: str) -> np.ndarray:
        answer = self.client.get(path)
        assert answer.status_code == 200, answer.text
        return np.load(io.BytesIO(answer.content), allow_pickle=False)

    def disk(self, run: str) -> dict[str, Any]:
        """Everything kept of a run: files with their sizes, and rows of the registry."""
        folder = self.data / "runs" / run
        files = {str(path.relative_to(folder)): path.stat().st_size for path in folder.rglob("*") if path.is_file()}
        with sqlite3.connect(f"file:{self.data / 'registry.sqlite'}?mode=ro", uri=True) as registry:
            rows = registry.execute("SELECT * FROM batches WHERE run = ? ORDER BY sequence", (run,)).fetchall()
            state = registry.execute("SELECT * FROM runs WHERE id = ?", (run,)).fetchall()
        registry.close()
        return {"files": files, "rows": rows, "state": state}


def declaration(**changes: Any) -> dict[str, Any]:
    """A small run: two fields on a roof panel of 6 by 8 points."""
    return {
        "name": "roof panel",
        "n_points": 48,
        "fields": [{"name": "p", "unit": "Pa"}, {"name": "q", "unit": "Pa"}],
        "grid": {"kind": "uniform", "shape": [6, 8], "spacing": [0.1, 0.1]},
        "time": {"step": 0.01},
        "retained_rank": 6,
        "criterion": {"n_modes": 2},
        **changes,
    }


def snapshots(start: int, stop: int, seed: int = 7) -> np.ndarray:
    """Snapshots [start, stop) of two decaying patterns in noise, (n, 2, 48) float32; the same for any cut."""
    shapes = np.random.default_rng(seed).standard_normal((3, 96))
    rows = []
    for k in range(start, stop):
        noise = np.random.default_rng((seed, k)).standard_normal(99)
        rows.append(5.0 * noise[96] * shapes[0] + 2.0 * noise[97] * shapes[1] + shapes[2] + 0.1 * noise[:96])
    return np.array(rows, np.float32).reshape(-1, 2, 48)


def npy(array: np.ndarray) -> bytes:
    buffer = io.BytesIO()
    np.save(buffer, array, allow_pickle=array.dtype.hasobject)
    return buffer.getvalue()


def check_problem(answer: httpx.Response, status: int, kind: str) -> dict[str, Any]:
    """The answer is a whole problem document of the given kind; return it."""
    assert answer.status_code == status, answer.text
    assert answer.headers["content-type"] == "application/problem+json"
    document: dict[str, Any] = answer.json()
    assert document["type"] == f"/problems/{kind}"
    assert document["status"] == status
    assert document["title"]
    assert document["detail"]
    if status in (429, 503, 507):
        assert int(answer.headers["retry-after"]) > 0
    return document
