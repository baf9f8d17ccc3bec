"""``slackwater wait``: wait until the modes of a run have settled, and end with a code a script can use."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from enum import IntEnum
from pathlib import Path
from typing import Annotated, Any

import typer
from rich.console import Console
from rich.text import Text

from service import stop_file
from service.verdict_text import STYLE_OF_STATE, headline
from slackwater_client import (
    Client,
    ConvergenceReport,
    NotFoundError,
    Run,
    SlackwaterError,
    UnreachableError,
)

# Short beside the time between two verdicts of any run worth waiting for, long beside the cost of a request.
WATCH_SECONDS = 5.0

RunId = Annotated[str, typer.Argument(metavar="RUN", help="Id of the run.", show_default=False)]
Url = Annotated[
    str,
    typer.Option(
        "--url",
        envvar="SLACKWATER_URL",
        help="Address of the service; its token is read from SLACKWATER_TOKEN.",
    ),
]
Json = Annotated[bool, typer.Option("--json", help="Print the result as JSON on standard output.")]

DEFAULT_URL = "http://127.0.0.1:8350"


class Exit(IntEnum):
    """Exit codes of ``slackwater wait``; ``slackwater status`` uses 0, 1, 2, 7 and 8."""

    SETTLED = 0
    ERROR = 1
    USAGE = 2  # given by the command line parser
    UNSETTLED = 3
    DRIFTING = 4
    INSEPARABLE = 5
    FAILED = 6
    UNREACHABLE = 7
    UNKNOWN_RUN = 8


EXIT_OF_STATE = {
    "settled": Exit.SETTLED,
    "gathering": Exit.UNSETTLED,
    "unsettled": Exit.UNSETTLED,
    "drifting": Exit.DRIFTING,
    "inseparable": Exit.INSEPARABLE,
}

WAIT_HELP = """Wait until the modes of RUN have settled.

Ends when they have, when the run is closed or has failed, or after --timeout seconds. The exit code says how:

\b
0  settled: the run may stop
1  something else went wrong (the message says what)
2  wrong usage
3  unsettled or gathering when the wait or the run ended
4  drifting when the wait or the run ended
5  inseparable when the wait or the run ended: ask for another number of modes
6  the run has failed
7  the service cannot be reached
8  no such run

With --touch FILE the file is left there when, and only when, the code is 0: a solver that looks for a stop file
then ends itself in good order. It is written beside and renamed, and holds one line of text.

It advises a person or a batch script; do not wire it to an interlock.
"""


def exit_code(status: str, state: str) -> Exit:
    """Exit code for the status of a run and the state of its verdict."""
    return Exit.FAILED if status == "failed" else EXIT_OF_STATE.get(state, Exit.ERROR)


@contextmanager
def failures_end_with_codes() -> Iterator[None]:
    """Turn errors of the client into one line on standard error and an exit code."""
    try:
        yield
    except (SlackwaterError, ValueError, OSError) as error:
        print(f"slackwater: {error}", file=sys.stderr)
        raise typer.Exit(_code_of(error)) from error


def _code_of(error: Exception) -> Exit:
    if isinstance(error, UnreachableError):
        return Exit.UNREACHABLE
    return Exit.UNKNOWN_RUN if isinstance(error, NotFoundError) else Exit.ERROR


def wait(
    run: RunId,
    url: Url = DEFAULT_URL,
    timeout: Annotated[
        float | None, typer.Option(min=0.0, help="Seconds to wait at most; without it, no limit.")
    ] = None,
    patience: Annotated[
        float,
        typer.Option(min=0.0, help="Seconds the service may be away in the middle, as for a restart."),
    ] = 60.0,
    touch: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Leave this stop file when the modes have settled.")
    ] = None,
    touch_text: Annotated[
        str | None, typer.Option(metavar="TEXT", help="What the stop file holds; the verdict when not given.")
    ] = None,
    as_json: Json = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing; the exit code says it all.")] = False,
) -> None:
    with failures_end_with_codes(), Client(url) as client:
        if touch is not None:
            stop_file.check_place(touch)
        found = client.run(run)
        limit = float("inf") if timeout is None else timeout
        report = _followed(found, limit, patience, show=not quiet)
        code = exit_code(str(found.resource["status"]), report["verdict"]["state"])
        if touch is not None and code is Exit.SETTLED:
            stop_file.leave(touch, touch_text or f"{found.name}: {headline(report, found.declaration)}")
        if not quiet:
            print(_json_text(found, report, code) if as_json else _last_words(found, report))
    raise typer.Exit(code)


wait.__doc__ = WAIT_HELP


def _followed(run: Run, timeout: float, patience: float, show: bool) -> ConvergenceReport:
    """Show each report as it comes and give the last: one live line on a terminal, plain lines elsewhere."""
    console = Console(stderr=True, quiet=not show)
    shown = ""
    with console.status("waiting for the first report") as live:
        for report in run.watch(timeout, patience_seconds=patience, hold=WATCH_SECONDS):
            line = headline(report, run.declaration)
            style = STYLE_OF_STATE.get(report["verdict"]["state"], "")
            live.update(Text.assemble(f"{run.name}: ", (line, style)))
            if not console.is_terminal and line != shown:
                console.print(f"{run.name}: {line}", soft_wrap=True, markup=False, highlight=False)
            shown = line
    return report


def _last_words(run: Run, report: ConvergenceReport) -> str:
    """The verdict and its reasons, for standard output."""
    resource = run.resource
    lines = [f"{run.name}: {headline(report, run.declaration)}"]
    if resource["status"] == "failed":
        lines = [f"{run.name}: failed: {resource.get('reason') or 'no reason given'}"]
    lines += [f"  {reason['text']}" for reason in report["verdict"]["reasons"]]
    return "\n".join(lines)


def _json_text(run: Run, report: ConvergenceReport, code: Exit) -> str:
    answer: dict[str, Any] = {
        "run": run.id,
        "status": run.resource["status"],
        "state": report["verdict"]["state"],
        "exit_code": int(code),
        "convergence": report,
    }
    return json.dumps(answer, indent=2)


def register(app: typer.Typer) -> None:
    """Add ``wait`` and ``status`` to the command line."""
    from service.commands_status import status

    app.command("wait")(wait)
    app.command("status")(status)
