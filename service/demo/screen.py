"""What the demonstration shows: a live view on a terminal, plain lines elsewhere."""

from __future__ import annotations

import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from rich.console import Console, Group, RenderableType
from rich.live import Live
from rich.progress_bar import ProgressBar
from rich.table import Table
from rich.text import Text

from service.verdict_text import STYLE_OF_STATE, group_name, headline, max_angle_of, to_go
from slackwater_client import ConvergenceReport

QUIET_SECONDS = 15.0  # a sign of life on plain output, while nothing new has been found
BAR_CELLS = 30


@dataclass(frozen=True)
class Sight:
    """One look at the run: snapshots the service has, of how many planned, and its latest report, if any."""

    n_posted: int
    n_planned: int
    declaration: Mapping[str, Any]
    seconds: float
    report: ConvergenceReport | None


class Screen:
    """Shows one `Sight` after the other."""

    def __init__(self, console: Console, live: Live | None) -> None:
        self._console, self._live = console, live
        self._shown_snapshots = -1
        self._shown_at = 0.0

    def show(self, sight: Sight) -> None:
        """Draw the view anew, or print a line when there is something new to say."""
        if self._live is not None:
            self._live.update(live_view(sight))
            return
        new = -1 if sight.report is None else sight.report["n_snapshots"]
        if new == self._shown_snapshots and time.monotonic() - self._shown_at < QUIET_SECONDS:
            return
        self._shown_snapshots, self._shown_at = new, time.monotonic()
        self._console.print(plain_line(sight), markup=False, highlight=False, soft_wrap=True)


@contextmanager
def screen(console: Console) -> Iterator[Screen]:
    """Open a live view if the console is a terminal."""
    if not console.is_terminal:
        yield Screen(console, None)
        return
    with Live(console=console, refresh_per_second=4) as live:
        yield Screen(console, live)


def plain_line(sight: Sight) -> str:
    """One line: time, snapshots posted, and the verdict."""
    start = f"{sight.seconds:4.0f} s  {sight.n_posted:,} posted"
    if sight.report is None:
        return f"{start} · the flow is starting up"
    return f"{start} · {headline(sight.report, sight.declaration)}"


def live_view(sight: Sight) -> RenderableType:
    """Snapshots against the plan, then the verdict, its numbers and its reasons."""
    grid = Table.grid(padding=(0, 2))
    grid.add_column(style="dim")
    grid.add_column()
    bar = ProgressBar(total=sight.n_planned, completed=sight.n_posted, width=BAR_CELLS)
    grid.add_row("elapsed", f"{sight.seconds:.0f} s")
    grid.add_row("posted", f"{sight.n_posted:,} snapshots; a fixed plan would take {sight.n_planned:,}")
    grid.add_row("", bar)
    if sight.report is None:
        grid.add_row("verdict", "none yet: the flow is starting up")
        return grid
    return Group(grid, _verdict(sight.report, sight.declaration))


def _verdict(report: ConvergenceReport, declaration: Mapping[str, Any]) -> RenderableType:
    grid = Table.grid(padding=(0, 2))
    grid.add_column(style="dim")
    grid.add_column()
    state = report["verdict"]["state"]
    grid.add_row("verdict", Text(state, style=STYLE_OF_STATE.get(state, "")))
    for group in report["groups"]:
        grid.add_row(group_name(group), _bound(group["angle_bound_deg"], max_angle_of(declaration)))
    grid.add_row("to go", to_go(report, str(declaration["time"]["unit"])) or "-")
    for reason in report["verdict"]["reasons"]:
        grid.add_row("because", Text(reason["text"]))
    return grid


def _bound(bound_deg: float | None, max_angle_deg: float) -> str:
    if bound_deg is None:
        return "misalignment not known yet"
    side = "within" if bound_deg <= max_angle_deg else "over"
    return f"misalignment at most {bound_deg:.1f} deg, {side} the tolerance of {max_angle_deg:g} deg"
