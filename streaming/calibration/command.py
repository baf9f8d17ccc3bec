"""The command ``slackwater calibrate``: trials of the stopping rule on processes whose modes are known."""

from __future__ import annotations

from typing import Annotated

import typer

MAX_RUNS = 10_000
MAX_JOBS = 64


def register(app: typer.Typer) -> None:
    """Add the command to a Typer application."""
    app.command("calibrate")(calibrate)


def calibrate(
    runs: Annotated[int, typer.Option(min=1, max=MAX_RUNS, help="Trials of each process.")] = 60,
    seed: Annotated[int, typer.Option(min=0, help="Seed of the first trial; the others count up from it.")] = 0,
    process: Annotated[list[str] | None, typer.Option(help="Process to try; may be given again.")] = None,
    jobs: Annotated[int, typer.Option(min=1, max=MAX_JOBS, help="Trials at the same time.")] = 2,
    max_angle_deg: Annotated[float, typer.Option(min=0.1, max=45.0, help="Tolerated misalignment.")] = 10.0,
) -> None:
    """Try the stopping rule on random flows whose modes are known, and count how often it stops too early.

    The oracle knows the true modes and stops at the first of two looks in a row within tolerance, even if they leave it
    again; "lasting" is the look from which on they stay. The naive rule stops when the modes change by less than the
    tolerance between looks, twice in a row.
    """
    from streaming.calibration.table import names_of, print_table  # late: the engine takes seconds to import

    try:
        names = names_of(process)
    except ValueError as error:
        raise typer.BadParameter(str(error)) from error
    print_table(names, range(seed, seed + runs), jobs, max_angle_deg)
