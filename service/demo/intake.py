"""The solver of the demonstration as a program: computes the intake flow, posts it, and ends itself on advice.

    python -m service.demo.intake --url http://127.0.0.1:8350 --run-name "intake"

The lines that concern the service are the hook and the test of its advice in `solve`; a solver of your own needs
no more than that.
"""

from __future__ import annotations

from service.threads import fix_blas_threads

fix_blas_threads()  # before anything below imports numpy; the other core is the service's

import sys  # noqa: E402
from typing import Annotated  # noqa: E402

import typer  # noqa: E402

from service.demo.duct import (  # noqa: E402
    FIXED_PLAN_SNAPSHOTS,
    STEPS_PER_SNAPSHOT,
    WARM_UP_STEPS,
    IntakeFlow,
    declaration,
)
from service.demo.lattice import MAX_SPEED  # noqa: E402
from slackwater_client import Client, Run, SlackwaterError  # noqa: E402

SNAPSHOTS_PER_POST = 8


class BrokenFlowError(RuntimeError):
    """The solution left the range in which the scheme means anything."""


def solve(run: Run, max_snapshots: int) -> tuple[int, str]:
    """Compute and post until the advice is to stop, or the plan is done; return snapshots and last advice."""
    flow = IntakeFlow()
    flow.advance(WARM_UP_STEPS)
    with run.hook(every=STEPS_PER_SNAPSHOT, batch=SNAPSHOTS_PER_POST) as hook:
        for n_snapshots in range(1, max_snapshots + 1):
            flow.advance(STEPS_PER_SNAPSHOT)
            check_flow(flow)
            advice = hook(flow.n_steps, flow.time_s, flow.fields())
            if advice == "may stop":
                return n_snapshots, advice
    return max_snapshots, advice


def check_flow(flow: IntakeFlow) -> None:
    """Raise BrokenFlowError when a speed is not a number or too fast for the scheme."""
    speed = flow.lattice_speed()
    if not speed < MAX_SPEED:
        raise BrokenFlowError(
            f"speed {speed} cells per step at step {flow.n_steps}, the scheme holds below {MAX_SPEED}"
        )


def main(
    url: Annotated[str, typer.Option(help="Address of the service.")] = "http://127.0.0.1:8350",
    run_name: Annotated[str, typer.Option(help="Name of the run.")] = "intake duct",
    max_snapshots: Annotated[
        int, typer.Option(min=1, help="Snapshots after which it ends in any case.")
    ] = FIXED_PLAN_SNAPSHOTS,
) -> None:
    """Compute the flow through the intake and post it to a service until the modes have settled."""
    try:
        with Client(url) as client:
            run = client.declare(declaration(run_name))
            print(f"run {run.id}", flush=True)
            n_snapshots, advice = solve(run, max_snapshots)
            run.close()
    except (SlackwaterError, BrokenFlowError) as error:
        print(f"intake: {error}", file=sys.stderr)
        raise typer.Exit(1) from error
    print(f"ended after {n_snapshots} snapshots; advice: {advice}", flush=True)


if __name__ == "__main__":
    typer.run(main)
