"""``slackwater watch-folder``: post files as a rig writes them."""

from __future__ import annotations

import sys
import time
from functools import partial
from pathlib import Path
from typing import Annotated

import typer

from service import stop_file
from service.commands_feed import INTERRUPTED, parse_fields_or_end
from service.commands_wait import DEFAULT_URL, Url, failures_end_with_codes
from service.feeding import options
from service.feeding.choice import Choice, parse_axis
from service.feeding.declaring import complete
from service.feeding.folder import Order
from service.feeding.opening import open_data
from service.feeding.series import MAX_BATCH_BYTES
from service.feeding.variables import FeedError, closing
from service.feeding.watching import Manner, Watcher
from service.verdict_text import headline
from slackwater_client import Client, Run

Folder = Annotated[
    Path, typer.Argument(metavar="DIR", exists=True, file_okay=False, help="Where the rig writes.", show_default=False)
]
OrderOption = Annotated[
    Order, typer.Option("--order", help="Order of the files: numbers in a name by value, or time of change.")
]
Settle = Annotated[float, typer.Option(min=0.0, help="Seconds without change after which a file is whole.")]
GiveUp = Annotated[
    float, typer.Option(min=0.0, help="Seconds without change after which an unreadable file is refused.")
]
Touch = Annotated[Path | None, typer.Option(metavar="FILE", help="Leave this stop file once the modes have settled.")]
Poll = Annotated[float, typer.Option(min=0.05, help="Seconds between two looks into the folder.")]


def watch_folder(
    folder: Folder,
    declaration: options.DeclarationFile = None,
    run: options.RunOption = None,
    pattern: Annotated[str, typer.Option(help="Names to take, as in a shell.")] = "*",
    order: OrderOption = "name",
    settle: Settle = 2.0,
    give_up: GiveUp = 60.0,
    mark: Annotated[bool, typer.Option("--mark", help="Leave files there, with a NAME.posted beside them.")] = False,
    poll: Poll = 1.0,
    end_after_idle: Annotated[
        float | None, typer.Option(min=0.0, help="End when nothing has come for so many seconds, and close the run.")
    ] = None,
    stop_when_settled: Annotated[
        bool, typer.Option("--stop-when-settled", help="End once the modes have settled; the run stays open.")
    ] = False,
    touch: Touch = None,
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
    max_batch_bytes: options.BatchBytes = MAX_BATCH_BYTES,
    patience: options.Patience = float("inf"),
    url: Url = DEFAULT_URL,
) -> None:
    """Post the files of DIR as a rig writes them, each once.

    A file is taken when it has not changed for --settle seconds; hidden files and names such as *.part are left alone.
    Once its snapshots are safe with the service it moves to DIR/done. What cannot be taken moves to DIR/refused with
    the reason in a .txt beside it, and the watch goes on. The folder is polled, so network file systems will do.

    The run is declared from the first file and --declaration, unless --run names one. DIR remembers it: after any end
    the same command goes on, and no file is posted twice.

    Exit codes: 0 ended as asked, 1 something went wrong, 2 wrong usage, 7 service not reachable, 8 no such run, 130
    interrupted. It advises; a person stops the rig.
    """
    choice = Choice(parse_fields_or_end(variable), time, parse_axis(time_axis), without_times, one_each)
    manner = Manner(pattern, order, settle, give_up, mark, max_batch_bytes, patience)
    with failures_end_with_codes(), Client(url) as client:
        if touch is not None:
            stop_file.check_place(touch)
        members = options.declared_members(declaration, name, campaign, modes, max_angle_deg)
        declare = partial(_declared, client, members, choice, (weights, positions))
        given = client.run(run) if run is not None else None
        watcher = Watcher(folder, choice, manner, (lambda _: given) if given else declare, _tell)
        try:
            _take_up(watcher, client, given)
            _watch(watcher, poll, end_after_idle, stop_when_settled, touch)
        finally:
            watcher.list.close()


def _take_up(watcher: Watcher, client: Client, given: Run | None) -> None:
    """Go on with the run that the folder belongs to. Raises FeedError when another one is asked for."""
    watcher.resume(client.run)
    if given is not None and watcher.run is not None and watcher.run.id != given.id:
        raise FeedError(
            f"{watcher.folder} belongs to run {watcher.run.id} already, not to {given.id}; watch another folder, or "
            f"delete {watcher.list.path}"
        )


def _declared(
    client: Client, members: dict[str, object], choice: Choice, arrays: tuple[Path | None, Path | None], path: Path
) -> Run:
    """Declare the run that the first file belongs to."""
    with closing(open_data(path)) as file:
        declaration = complete(members, file, choice)
    weights, positions = map(options.load_npy, arrays)
    run = client.declare(declaration.model_dump(mode="json"))
    if weights is not None:
        run.put_weights(weights)
    if positions is not None:
        run.put_positions(positions)
    _tell(f"run {run.id}")
    return run


def _watch(
    watcher: Watcher, poll: float, end_after_idle: float | None, stop_when_settled: bool, touch: Path | None
) -> None:
    """Look until there is a reason to end."""

    def ended() -> bool:
        return stop_when_settled and watcher.may_stop

    try:
        while True:
            watcher.poll(ended)
            if touch is not None and watcher.may_stop:
                stop_file.leave(touch, "settled: the run may stop")
                touch = None  # once is enough
            if ended():
                break
            if end_after_idle is not None and watcher.idle_seconds > end_after_idle:
                if watcher.run is not None:
                    watcher.run.close()
                break
            time.sleep(poll)
    except KeyboardInterrupt:
        _tell("interrupted; the same command goes on where it stopped")
        raise typer.Exit(INTERRUPTED) from None
    if watcher.run is not None:
        print(f"{watcher.run.id}: {headline(watcher.run.convergence(), watcher.run.declaration)}")


def _tell(text: str) -> None:
    print(text, file=sys.stderr, flush=True)


def register(app: typer.Typer) -> None:
    """Add ``watch-folder`` to the command line."""
    app.command("watch-folder")(watch_folder)
