"""``slackwater campaign``: the test points of a campaign side by side."""

from __future__ import annotations

import json
from typing import Annotated, Any

import typer
from rich import box
from rich.console import Group
from rich.table import Table
from rich.text import Text

from service.commands_status import output_console
from service.commands_wait import DEFAULT_URL, Json, Url, failures_end_with_codes
from service.verdict_text import STYLE_OF_STATE, angle, two_digits
from slackwater_client import Client

SHOWN_MODES = 3  # more belong into --json
RIGHT = ("snapshots", "bound, deg", "to go", "energy")


def campaign(
    name: Annotated[str | None, typer.Argument(metavar="NAME", help="Of a campaign.", show_default=False)] = None,
    between: Annotated[
        str | None,
        typer.Option(metavar="RUN,RUN", help="Ids of 2 to 5 points: angles between their wanted modes."),
    ] = None,
    url: Url = DEFAULT_URL,
    as_json: Json = False,
) -> None:
    """List the campaigns, or show the test points of campaign NAME side by side.

    Shares of the wanted modes are of each point's total energy, with their intervals. Exit codes: 0 shown, 1 something
    went wrong, 2 wrong usage, 7 service not reachable, 8 no such campaign.
    """
    with failures_end_with_codes(), Client(url) as client:
        if name is None:
            found: Any = client.campaigns()
            shown: Any = _overview(found) if found else f"no campaigns at {client.url}"
        else:
            found = client.campaign(name, between.split(",") if between else ())
            shown = detail(found)
        if as_json:
            print(json.dumps(found, indent=2))
        else:
            output_console().print(shown)


def _overview(campaigns: list[dict[str, Any]]) -> Table:
    table = _table("campaign", "points", "snapshots", "verdicts")
    for one in campaigns:
        verdicts = ", ".join(f"{count} {state}" for state, count in one["states"].items())
        table.add_row(Text(one["name"]), str(one["n_points"]), f"{one['n_snapshots']:,}", verdicts)
    return table


def detail(found: dict[str, Any]) -> Group:
    points = found["points"]
    labels = list(dict.fromkeys(name for point in points for name in point["labels"]))
    n_modes = min(SHOWN_MODES, max((len(point["modes"]) for point in points), default=0))
    modes = [f"mode {k + 1}, %" for k in range(n_modes)]
    strouhal = any(mode["strouhal"] is not None for point in points for mode in point["modes"])
    table = _table("run", *labels, "verdict", "snapshots", "bound, deg", "to go", "energy", *modes, "peak")
    for point in points:
        table.add_row(*_row(point, labels, n_modes))
    lines = [
        Text(f"{found['name']}: {len(points)} points; peak is " + ("St" if strouhal else "frequency") + " of mode 1")
    ]
    lines += [Text(line) for line in _closing_lines(found)]
    return Group(table, *lines)


def _row(point: dict[str, Any], labels: list[str], n_modes: int) -> list[str | Text]:
    shown = "failed" if point["status"] == "failed" else point["verdict"]
    ending = "" if point["status"] in ("open", "failed") else f", {point['status']}"
    to_go = point["snapshots_to_go"]
    modes = point["modes"]
    return [
        Text(point["run"]),
        *(Text(str(point["labels"].get(label, "-"))) for label in labels),
        Text(shown + ending, style=STYLE_OF_STATE.get(shown, "")),
        f"{point['n_snapshots']:,}",
        f"{angle(point['bound_deg'])} of {point['max_angle_deg']:g}",
        two_digits(to_go["estimate"]) if to_go and shown != "settled" else "-",
        angle(point["total_energy"]),
        *(_share(modes[k]) if k < len(modes) else "-" for k in range(n_modes)),
        _peak(modes[0]) if modes else "-",
    ]


def _share(mode: dict[str, Any]) -> str:
    low, middle, high = (100 * mode[f"energy_fraction{end}"] for end in ("_low", "", "_high"))
    return f"{middle:.3g} ({low:.3g} to {high:.3g})"


def _peak(mode: dict[str, Any]) -> str:
    return angle(mode["strouhal"] if mode["strouhal"] is not None else mode["peak_frequency"])


def _closing_lines(found: dict[str, Any]) -> list[str]:
    """What the campaign cost, and the angles asked for."""
    totals = found["totals"]
    cost = f"{totals['n_snapshots']:,} snapshots in all"
    if totals["fixed_plan_snapshots"] is not None:
        cost += f"; {totals['fixed_plan_snapshots']:,} if every point got what the most demanding settled one took"
    lines = [cost]
    if found["left_out"]:
        lines.append(f"{found['left_out']} more points are not shown")
    for one in found["comparisons"]:
        first, second = one["between"]
        text = f"{first} against {second}: {angle(one['angle_deg'])} deg over {one['n_modes']} modes"
        if one["sampling_deg"] is not None:
            text += f"; up to {angle(one['sampling_deg'])} deg may be sampling"
        lines.append(text)
    return lines


def _table(*headings: str) -> Table:
    table = Table(box=box.SIMPLE, pad_edge=False, padding=0)
    for heading in headings:
        table.add_column(Text(heading), justify="right" if heading in RIGHT else "left", no_wrap=True)
    return table


def register(app: typer.Typer) -> None:
    """Add ``campaign`` to the command line."""
    app.command("campaign")(campaign)
