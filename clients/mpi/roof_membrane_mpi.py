"""A roof membrane in gusts on several ranks, each with some of its rows; all ranks stop together on the verdict.

    mpiexec -n 4 python roof_membrane_mpi.py

Damped wave equation on a rectangle with fixed edges, leap-frog in time; two gust patterns press on it, each wandering
about zero with a memory of its own. At each step that is posted, rank 0 gathers the field, hands it to its hook, and
tells all ranks the same advice, so that none goes on alone into the next exchange.
"""

from __future__ import annotations

from contextlib import nullcontext

import numpy as np
from mpi4py import MPI

from slackwater_client import Client, Hook, Run, SlackwaterError

NX, NY, EVERY, LONGEST = 30, 20, 20, 100_000
SPACING, STEP = 0.3, 0.006  # m, s
WAVE_SPEED, DAMPING, LOAD = 20.0, 8.0, 50.0  # m/s, 1/s, m/s2
MEMORY = np.array([0.4, 0.2])  # correlation times of the two gust patterns, s

DECLARATION = {
    "name": "roof membrane on ranks",
    "n_points": NX * NY,
    "fields": [{"name": "w", "unit": "m"}],
    "grid": {"kind": "uniform", "shape": [NY, NX], "spacing": [SPACING, SPACING]},
    "retained_rank": 12,
    "criterion": {"n_modes": 2, "max_angle_deg": 10},
}


class Rows:
    """The rows of one rank, with one more row on either side for the neighbours'."""

    def __init__(self, comm: MPI.Comm) -> None:
        self._comm = comm
        rows = np.array_split(np.arange(NY), comm.size)
        self.counts = [len(part) * NX for part in rows]
        self._now = np.zeros((len(rows[comm.rank]) + 2, NX + 2))
        self._before = np.zeros_like(self._now)
        self._lean = np.linspace(-1.0, 1.0, NX)

    def advance(self, gusts: np.ndarray) -> None:
        """One step; collective, as the edge rows are exchanged."""
        now, comm = self._now, self._comm
        below = comm.rank - 1 if comm.rank > 0 else MPI.PROC_NULL
        above = comm.rank + 1 if comm.rank < comm.size - 1 else MPI.PROC_NULL
        comm.Sendrecv(now[1], below, recvbuf=now[-1], source=above)
        comm.Sendrecv(now[-2], above, recvbuf=now[0], source=below)
        inner = now[1:-1, 1:-1]
        bend = (now[:-2, 1:-1] + now[2:, 1:-1] + now[1:-1, :-2] + now[1:-1, 2:] - 4.0 * inner) / SPACING**2
        press = LOAD * (gusts[0] + gusts[1] * self._lean)
        after = np.zeros_like(now)
        after[1:-1, 1:-1] = inner + (1.0 - DAMPING * STEP) * (inner - self._before[1:-1, 1:-1])
        after[1:-1, 1:-1] += STEP**2 * (WAVE_SPEED**2 * bend + press)
        self._before, self._now = now, after

    def gather(self) -> np.ndarray | None:
        """The whole field on rank 0, None elsewhere."""
        whole = np.empty(NX * NY) if self._comm.rank == 0 else None
        self._comm.Gatherv(np.ascontiguousarray(self._now[1:-1, 1:-1]), (whole, self.counts))
        return whole


def declare(comm: MPI.Comm) -> Run | None:
    """The run, on rank 0; None elsewhere, and where no service answers."""
    if comm.rank > 0:
        return None
    try:
        return Client().declare(DECLARATION)
    except SlackwaterError as error:
        print(f"going on without a service: {error}")
        return None


def solve(comm: MPI.Comm, hook: Hook | None) -> int:
    """Advance until all ranks may stop; gives the number of steps."""
    rows, rng, gusts = Rows(comm), np.random.default_rng(4), np.zeros(2)
    kept = np.exp(-STEP / MEMORY)
    for step in range(1, LONGEST + 1):
        gusts = kept * gusts + np.sqrt(1.0 - kept**2) * rng.normal(size=2)  # the same numbers on every rank
        rows.advance(gusts)
        if step % EVERY == 0:
            whole = rows.gather()
            advice = "continue" if hook is None or whole is None else hook(step, step * STEP, whole)
            if comm.bcast(advice) == "may stop":
                break
    return step


def main() -> None:
    comm = MPI.COMM_WORLD
    run = declare(comm)
    # this toy is quicker than any disk, so it lets itself be held while two batches wait
    settings = {"every": EVERY, "batch": 32, "max_waiting_bytes": 2 * 32 * NX * NY * 4, "hold_seconds": 30.0}
    with run.hook(**settings) if run is not None else nullcontext() as hook:
        steps = solve(comm, hook)
    print(f"rank {comm.rank}: {steps} steps", flush=True)
    if run is not None:
        run.close()
        print(f"{hook.sent_snapshots} snapshots sent, verdict: {run.convergence()['verdict']['state']}", flush=True)


if __name__ == "__main__":
    main()
