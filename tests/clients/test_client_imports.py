"""The client fits into the environment of a solver: numpy and httpx, and nothing else."""

from __future__ import annotations

import subprocess
import sys

LIST = "import sys; print(*sorted({name.split('.')[0] for name in sys.modules}))"


def _loaded(first: str) -> set[str]:
    """Top-level modules of a fresh interpreter after ``first``."""
    done = subprocess.run(
        [sys.executable, "-c", f"{first}; {LIST}"], capture_output=True, text=True, timeout=60, check=True
    )
    return set(done.stdout.split())


def test_the_client_loads_nothing_but_numpy_and_httpx() -> None:
    client = _loaded("import slackwater_client, slackwater_client.hook, slackwater_client.outbox")
    allowed = _loaded("import numpy, httpx") | set(sys.stdlib_module_names) | {"slackwater_client"}
    assert client - allowed == set()
