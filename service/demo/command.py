"""``slackwater demo``: a service, a flow solver that posts to it, and the solver ending itself when it may."""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path
from typing import Annotated, Literal

import typer
from rich.console import Console

from service.commands_wait import exit_code
from service.demo.duct import FIXED_PLAN_SNAPSHOTS
from service.demo.findings import gather, tell
from service.demo.processes import DemoError, Program, address_of, program, termination_as_exit
from service.demo.screen import Screen, Sight, screen
from service.demo.tunnel import run_tunnel
from slackwater_client import Client, ConvergenceReport, Run, SlackwaterError

POLL_SECONDS = 0.4
# The plan takes about two minutes on a fast core; this bounds a demonstration on a very slow one.
MAX_SECONDS = 1800.0
RUN_NAME = "intake duct"


def demo(
    scene: Annotated[
        Literal["intake", "tunnel"],
        typer.Argument(help="A solver that ends itself, or a campaign of five test points."),
    ] = "intake",
    keep: Annotated[bool, typer.Option("--keep", help="Leave the service up at the end, until Ctrl-C.")] = False,
    directory: Annotated[
        Path | None, typer.Option(help="Empty or new directory for data, pictures and logs [a temporary one].")
    ] = None,
) -> None:
    """Show the whole thing at work in about a minute: a flow solver that ends itself when its modes have settled.

    Starts a service on a free port of this machine and a solver of the air flow through an intake with three bars,
    which posts its snapshots to the service. Ends with code 0 when the modes have settled.

    With tunnel: a rig measures five test points of a roof panel, one after another, and drops files in a folder that is
    watched; one point drifts and one is inseparable.
    """
    console = Console()
    try:
        with termination_as_exit():
            if scene == "tunnel":
                raise typer.Exit(run_tunnel(console, prepared(directory)))
            code = run_demo(console, prepared(directory), keep)
    except (DemoError, SlackwaterError, OSError) as error:
        print(f"slackwater: {error}", file=sys.stderr)
        raise typer.Exit(1) from error
    except KeyboardInterrupt:
        raise typer.Exit(130) from None
    raise typer.Exit(code)


def register(app: typer.Typer) -> None:
    """Add the command to the application."""
    app.command("demo")(demo)


def prepared(directory: Path | None) -> Path:
    """Return an empty directory. Raises DemoError when the one asked for holds something."""
    if directory is None:
        return Path(tempfile.mkdtemp(prefix="slackwater-demo-"))
    directory.mkdir(parents=True, exist_ok=True)
    if any(directory.iterdir()):
        raise DemoError(f"{directory} is not empty; name a new directory, or empty it first")
    return directory.absolute()


def run_demo(console: Console, directory: Path, keep: bool) -> int:
    """Run service and solver, show them, and tell what was found; return the exit code."""
    begin = time.monotonic()
    data = directory / "data"
    serve = ["serve", "--port", "0", "--data-directory", str(data)]
    with program("service", "service", serve, directory / "service.log") as service:
        url = address_of(service)
        console.print(f"Service at {url}, data in {data}", highlight=False, soft_wrap=True)
        solve = ["--url", url, "--run-name", RUN_NAME]
        with program("solver", "service.demo.intake", solve, directory / "solver.log") as solver, Client(url) as client:
            run = declared_run(client, service, solver)
            with screen(console) as view:
                follow(run, service, solver, view, begin)
            found = gather(run, data, directory / "pictures")
            tell(console, found, time.monotonic() - begin)
            code = exit_code(run.status, found.report["verdict"]["state"])
        if keep:
            stay(console, url, service)
    return code


def declared_run(client: Client, service: Program, solver: Program) -> Run:
    """Wait until the solver has declared its run. Raises DemoError when it ends before."""
    while True:
        runs = client.runs()
        if runs:
            return runs[0]
        check(service, solver)
        if not solver.running:
            raise DemoError(f"the solver ended without declaring a run; see {solver.log}")
        time.sleep(POLL_SECONDS)


def follow(run: Run, service: Program, solver: Program, view: Screen, begin: float) -> None:
    """Show how the run stands until the solver has ended itself."""
    while True:
        running = solver.running  # asked first, so that the last look comes after the end
        seconds = time.monotonic() - begin
        view.show(look(run, seconds))
        check(service, solver)
        if not running:
            return
        if seconds > MAX_SECONDS:
            raise DemoError(f"the solver has not ended within {MAX_SECONDS:g} s; see {solver.log}")
        time.sleep(POLL_SECONDS)


def check(service: Program, solver: Program) -> None:
    """Raise DemoError when one of the two has failed."""
    service.check()
    solver.check()
    if not service.running:
        raise DemoError(f"the service ended by itself; see {service.log}")


def look(run: Run, seconds: float) -> Sight:
    """Read how the run stands. Raises DemoError when the service has given it up."""
    resource = run.refresh()
    if resource["status"] == "failed":
        raise DemoError(f"the run has failed: {resource['reason']}")
    report: ConvergenceReport | None = run.convergence() if resource["n_applied"] else None
    return Sight(
        n_posted=int(resource["n_snapshots"]),
        n_planned=FIXED_PLAN_SNAPSHOTS,
        declaration=resource["declaration"],
        seconds=seconds,
        report=report,
    )


def stay(console: Console, url: str, service: Program) -> None:
    """Leave the service up until Ctrl-C, or until it ends."""
    console.print(f"The service stays up at {url}; end it with Ctrl-C.", highlight=False, soft_wrap=True)
    try:
        while service.running:
            time.sleep(POLL_SECONDS)
    except KeyboardInterrupt:
        return
