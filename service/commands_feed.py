"""``slackwater feed``: post existing files to the service."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from typing import Annotated, Any

import typer
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

from service.commands_wait import DEFAULT_URL, Json, Url, failures_end_with_codes
from service.feeding import options
from service.feeding.choice import Choice, parse_axis, parse_fields
from service.feeding.declaring import complete
from service.feeding.opening import open_data
from service.feeding.posting import Place, check_continues, place_of, post_series
from service.feeding.series import MAX_BATCH_BYTES, Series, plan
from service.feeding.variables import closing
from service.verdict_text import headline
from slackwater_client import Client, Receipt, Run
from streaming.declaration import RunDeclaration

INTERRUPTED = 130  # as shells report an end by Ctrl-C

Files = Annotated[list[Path], typer.Argument(metavar="FILES...", help="In the order of time.", show_default=False)]


def feed(
    files: Files,
    declaration: options.DeclarationFile = None,
    run: options.RunOption = None,
    variable: options.Variables = None,
    time: options.TimeVariable = None,
    time_axis: options.TimeAxis = None,
    without_times: options.WithoutTimes = False,
    one_each: options.OneEach = False,
    name: options.Name = None,
    campaign: options.Campaign = None,
    modes: options.Modes = None,
    max_angle_deg: options.MaxAngle = None,
    weights: options.Weights = None,
    positions: options.Positions = None,
    leave_open: Annotated[bool, typer.Option("--leave-open", help="Do not close the run at the end.")] = False,
    stop_when_settled: Annotated[
        bool, typer.Option("--stop-when-settled", help="Post no more once the modes have settled.")
    ] = False,
    max_batch_bytes: options.BatchBytes = MAX_BATCH_BYTES,
    patience: options.Patience = 300.0,
    url: Url = DEFAULT_URL,
    as_json: Json = False,
) -> None:
    """Post existing files: npy, npz, csv and other tables, HDF5, NetCDF, zarr.

    The run is declared from the data and --declaration, unless --run names one. Files are read in bounded pieces. After
    an interruption the same command with --run goes on where the run stands: nothing is sent twice.

    HDF5 and NetCDF-4 need the package h5py (pip install 'slackwater[readers]').

    Exit codes: 0 all was posted (whatever the verdict), 1 something went wrong, 2 wrong usage, 7 service not
    reachable, 8 no such run, 130 interrupted.
    """
    choice = Choice(parse_fields_or_end(variable), time, parse_axis(time_axis), without_times, one_each)
    with failures_end_with_codes(), Client(url) as client:
        members = options.declared_members(declaration, name, campaign, modes, max_angle_deg)
        target, series = _continued(client, run, files, choice) if run else _declared(client, members, files, choice)
        place = place_of(target)
        check_continues(series, place)
        _send_arrays(target, place, weights, positions)
        _tell(
            f"run {target.id}: {series.n_snapshots - place.n_snapshots:,} of {series.n_snapshots:,} snapshots to post"
        )
        receipts = post_series(series, target, place, patience, max_batch_bytes)
        _follow(receipts, series, target, place, stop_when_settled)
        report = target.convergence() if leave_open else target.close()
        found: dict[str, Any] = {
            "run": target.id,
            "n_snapshots": target.refresh()["n_snapshots"],
            "convergence": report,
        }
        print(json.dumps(found, indent=2) if as_json else f"{target.id}: {headline(report, target.declaration)}")


def _declared(client: Client, members: dict[str, Any], files: list[Path], choice: Choice) -> tuple[Run, Series]:
    """Declare the run of these files, once all of them are known to fit."""
    with closing(open_data(files[0])) as first:
        declaration = complete(members, first, choice)
    series = plan(files, choice, declaration)
    return client.declare(declaration.model_dump(mode="json")), series


def _continued(client: Client, run_id: str, files: list[Path], choice: Choice) -> tuple[Run, Series]:
    """Find the run that these files belong to."""
    run = client.run(run_id)
    return run, plan(files, choice, RunDeclaration.model_validate(run.declaration))


def parse_fields_or_end(texts: list[str] | None) -> tuple[tuple[str | None, str], ...]:
    """Fields as chosen; what is wrong ends the command as wrong usage does."""
    try:
        return parse_fields(texts or [])
    except ValueError as error:
        raise typer.BadParameter(str(error)) from error


def _send_arrays(run: Run, place: Place, weights: Path | None, positions: Path | None) -> None:
    """Weights and positions, before the first batch; of a run that is continued they are there already."""
    if place.sequence == 0:
        if (values := options.load_npy(weights)) is not None:
            run.put_weights(values)
        if (values := options.load_npy(positions)) is not None:
            run.put_positions(values)


def _follow(
    receipts: Iterator[tuple[int, Receipt]], series: Series, run: Run, place: Place, stop_when_settled: bool
) -> None:
    """Post the series under a progress bar; Ctrl-C says how to go on."""
    bar = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
        disable=not sys.stderr.isatty(),
    )
    try:
        with bar:
            task = bar.add_task("posting", total=series.n_snapshots, completed=place.n_snapshots)
            for done, receipt in receipts:
                bar.update(task, completed=done, description=_words(receipt))
                if stop_when_settled and receipt.advice == "may stop":
                    return
    except KeyboardInterrupt:
        _tell(f"interrupted; the same command with --run {run.id} goes on where it stopped")
        raise typer.Exit(INTERRUPTED) from None


def _words(receipt: Receipt) -> str:
    forecast = receipt.snapshots_to_go
    return receipt.verdict + (f", about {forecast.estimate:,} to go" if forecast else "")


def _tell(text: str) -> None:
    with suppress(BrokenPipeError):
        print(text, file=sys.stderr, flush=True)


def register(app: typer.Typer) -> None:
    """Add ``feed`` to the command line."""
    app.command("feed")(feed)
