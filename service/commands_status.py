"""``slackwater status``: all runs in a table, or one run in detail."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Annotated, Any

import typer
from rich import box
from rich.console import Console, Group
from rich.table import Table
from rich.text import Text

from service.commands_wait import DEFAULT_URL, Json, Url, failures_end_with_codes
from service.verdict_text import (
    STYLE_OF_STATE,
    angle,
    group_name,
    groups_table,
    headline,
    max_angle_of,
    modes_table,
    number_lines,
    two_digits,
    worst_group,
)
from slackwater_client import Client, ConvergenceReport, Run

# Each run costs a request, and no terminal shows more at once.
MAX_LISTED_RUNS = 100
MAX_NAMED_PARTS = 8  # fits a line
PLAIN_WIDTH = 160


def status(
    run: Annotated[
        str | None, typer.Argument(metavar="RUN", help="Id of a run, for details.", show_default=False)
    ] = None,
    url: Url = DEFAULT_URL,
    as_json: Json = False,
) -> None:
    """Show all runs and their verdicts, or one RUN in detail.

    Exit codes: 0 shown, 1 something went wrong, 2 wrong usage, 7 service not reachable, 8 no such run.
    """
    with failures_end_with_codes(), Client(url) as client:
        if run is None:
            _show_all(client, as_json)
        else:
            _show_one(client.run(run), as_json)


def _show_one(run: Run, as_json: bool) -> None:
    report = run.convergence()
    if as_json:
        print(json.dumps({"run": run.resource, "convergence": report}, indent=2))
        return
    output_console().print(_detail(run, report))


def _show_all(client: Client, as_json: bool) -> None:
    runs = client.runs()
    rows = [(run, run.convergence()) for run in runs[:MAX_LISTED_RUNS]]
    if as_json:
        listed: list[dict[str, Any]] = [{"run": run.resource, "verdict": it["verdict"]} for run, it in rows]
        print(json.dumps({"runs": listed, "left_out": len(runs) - len(rows)}, indent=2))
        return
    console = output_console()
    console.print(_overview(rows) if rows else f"no runs at {client.url}")
    if len(runs) > len(rows):
        console.print(f"{len(runs) - len(rows)} more runs are not shown")


def output_console() -> Console:
    """Standard output; in a file or a pipe, wide enough that nothing is cut."""
    console = Console()
    return console if console.is_terminal else Console(width=max(console.width, PLAIN_WIDTH))


def _overview(rows: list[tuple[Run, ConvergenceReport]]) -> Table:
    """One row for each run: is it settled, what holds it back, how long to go."""
    table = Table(box=box.SIMPLE, pad_edge=False, padding=0)
    for heading in ("run", "verdict", "snapshots", "bound, deg", "to go", "held by"):
        table.add_column(
            heading, justify="right" if heading in ("snapshots", "bound, deg", "to go") else "left", no_wrap=True
        )
    for run, report in rows:
        state, worst = report["verdict"]["state"], worst_group(report["groups"])
        status, forecast = str(run.resource["status"]), report["verdict"]["snapshots_to_go"]
        shown = "failed" if status == "failed" else state
        ending = "" if status in ("open", "failed") else f", {status}"
        table.add_row(
            run.id,
            Text(shown + ending, style=STYLE_OF_STATE.get(shown, "")),
            f"{report['n_snapshots']:,}",
            f"{angle(worst['angle_bound_deg'])} of {max_angle_of(run.declaration):g}" if worst else "-",
            two_digits(forecast["estimate"]) if forecast and state != "settled" else "-",
            group_name(worst) if worst and not worst["settled"] else "-",
        )
    return table


def _detail(run: Run, report: ConvergenceReport) -> Group:
    """Everything about one run that fits a screen."""
    tolerance, state = max_angle_of(run.declaration), report["verdict"]["state"]
    parts: list[Any] = [
        Text(f"{run.name} ({run.id}), {run.resource['status']}"),
        Text(headline(report, run.declaration), style=STYLE_OF_STATE.get(state, "")),
    ]
    if run.resource.get("reason"):
        parts.append(Text(f"failed: {run.resource['reason']}", style=STYLE_OF_STATE["failed"]))
    if (late := late_parts(run.resource)) is not None:
        parts.append(Text(late, style=STYLE_OF_STATE["drifting"]))
    unit = str(run.declaration["time"]["unit"])
    parts += [Text(line) for line in number_lines(report, unit)]
    if report["groups"]:
        parts += [groups_table(report, tolerance), modes_table(report)]
    return Group(*parts)


def late_parts(resource: Mapping[str, Any]) -> str | None:
    """Which parts of a run the others wait for, and for how long; None when nothing waits, or there are no parts."""
    status = resource.get("parts")
    if not status or not status["n_late"]:
        return None
    late = [one["part"] for one in status["slowest"] if one["next_sequence"] <= resource["next_sequence"]]
    named = ", ".join(map(str, late[:MAX_NAMED_PARTS])) + (", ..." if status["n_late"] > MAX_NAMED_PARTS else "")
    return (
        f"{status['n_late']} of {status['n_parts']} parts are late ({named}): batch {resource['next_sequence']} waits "
        f"for them since {status['late_since']}, {status['late_seconds']:.0f} s"
    )
