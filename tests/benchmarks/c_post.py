"""Print how long a post holds a solver up: ``python -m tests.benchmarks.c_post [--points 5e5] [--posts 96]``.

The C client posts to a service on this machine; one memcpy of the same size is taken beside each post, in the same run.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import tempfile
from pathlib import Path

import numpy as np
from rich.console import Console
from rich.table import Table

from tests.clients.building import C_CLIENT, clean_environment
from tests.clients.conftest import Service

PROGRAM = Path(__file__).parent / "c" / "held_up.c"


def main() -> None:
    """Measure, and print a table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--points", type=float, default=5e5, help="points of a snapshot with two float32 fields")
    parser.add_argument("--posts", type=int, default=96)
    parser.add_argument("--pause-ms", type=float, default=40.0, help="what the solver does between posts")
    chosen = parser.parse_args()
    with tempfile.TemporaryDirectory(prefix="slackwater-") as place:
        pairs = measure(Path(place), int(chosen.points), chosen.posts, chosen.pause_ms)
    megabytes = 8e-6 * chosen.points
    table = Table(title=f"Solver held up, snapshots of {megabytes:g} MB, {len(pairs)} posts, {os.cpu_count()} cores")
    for heading in ("milliseconds", "post", "memcpy", "ratio"):
        table.add_column(heading, justify="right")
    own = "solver's processor time, "
    for name, share, columns in (
        ("median", 50.0, pairs[:, :2]),
        ("90 %", 90.0, pairs[:, :2]),
        ("longest", 100.0, pairs[:, :2]),
        ("median where a batch is handed over", 50.0, pairs[7::8, :2]),
        (own + "median", 50.0, pairs[:, 2:]),
        (own + "90 %", 90.0, pairs[:, 2:]),
        (own + "longest", 100.0, pairs[:, 2:]),
    ):
        post, copy = np.percentile(1e3 * columns, share, axis=0)
        table.add_row(name, f"{post:.3f}", f"{copy:.3f}", f"{post / copy:.2f}")
    Console().print(table)


def measure(
    place: Path, n_points: int, n_posts: int, pause_ms: float
) -> np.ndarray[tuple[int, int], np.dtype[np.float64]]:
    """Seconds of each post and of the copy beside it, by the clock and of processor time, (n_posts, 4)."""
    program = place / "held_up"
    sources = [str(PROGRAM), str(C_CLIENT / "slackwater.c")]
    subprocess.run(
        ["cc", "-std=c99", "-O2", f"-I{C_CLIENT}", "-pthread", "-o", str(program), *sources], check=True, timeout=60
    )
    service = Service(place / "data")
    service.start()
    try:
        done = subprocess.run(
            [str(program), str(n_points), str(n_posts), str(pause_ms)],
            env=clean_environment(service.url),
            capture_output=True,
            text=True,
            timeout=300,
        )
    finally:
        service.stop()
    if done.returncode != 0:
        raise SystemExit(f"the program ended with {done.returncode}:\n{done.stderr}")
    return np.array([line.split() for line in done.stdout.splitlines()], dtype=np.float64)


if __name__ == "__main__":
    main()
