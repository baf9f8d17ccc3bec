"""The verdict of a run in words, for a terminal: one line, or tables."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from rich import box
from rich.table import Table

from slackwater_client import ConvergenceReport, GroupReport

STYLE_OF_STATE = {
    "gathering": "dim",
    "unsettled": "yellow",
    "settled": "bold green",
    "drifting": "magenta",
    "inseparable": "magenta",
    "failed": "bold red",
}


def headline(report: ConvergenceReport, declaration: Mapping[str, Any]) -> str:
    """State, snapshots, the bound that holds it back against its tolerance, and the forecast, in one line."""
    parts = [report["verdict"]["state"], f"{report['n_snapshots']:,} snapshots"]
    worst = worst_group(report["groups"])
    if worst is not None:
        bound, tolerance = angle(worst["angle_bound_deg"]), max_angle_of(declaration)
        parts.append(f"bound {bound} of {tolerance:g} deg for {group_name(worst)}")
    parts.append(to_go(report, str(declaration["time"]["unit"])))
    return " · ".join(part for part in parts if part)


def worst_group(groups: Iterable[GroupReport]) -> GroupReport | None:
    """The group furthest from settled; a bound that does not exist yet counts as the largest."""
    return max(groups, key=lambda group: (not group["settled"], _or_infinite(group)), default=None)


def group_name(group: GroupReport) -> str:
    """Modes of a group as people say them: mode 3, modes 1-2."""
    first, last = group["modes"][0], group["modes"][-1]
    return f"mode {first}" if first == last else f"modes {first}-{last}"


def to_go(report: ConvergenceReport, time_unit: str) -> str:
    """The forecast in words; empty when there is none or nothing is left to do."""
    forecast = report["verdict"]["snapshots_to_go"]
    if forecast is None or report["verdict"]["state"] == "settled":
        return ""
    estimate, low, high = (two_digits(forecast[name]) for name in ("estimate", "low", "high"))
    span = forecast.get("time")
    return f"about {estimate} to go ({low} to {high})" + (f", {span:.2g} {time_unit}" if span else "")


def two_digits(count: int) -> str:
    """A forecast count to the two digits it is worth: 8,361 is 8,400."""
    return f"{int(float(f'{count:.2g}')):,}"


def angle(value_deg: float | None) -> str:
    """An angle to three digits; a dash when it does not exist."""
    return "-" if value_deg is None else f"{value_deg:.3g}"


def groups_table(report: ConvergenceReport, max_angle_deg: float) -> Table:
    """One row for each group of modes: is it settled, and by how much."""
    table = Table(title=f"Groups of modes, tolerance {max_angle_deg:g} deg", title_justify="left", box=box.SIMPLE)
    for heading in ("modes", "expected, deg", "bound, deg", "truncation, deg", "energy +/-", "settled"):
        table.add_column(heading, justify="right" if heading != "settled" else "left")
    for group in report["groups"]:
        table.add_row(
            group_name(group).split(" ", 1)[1],
            angle(group["angle_deg"]),
            angle(group["angle_bound_deg"]),
            angle(group["truncation_angle_deg"]),
            _percent(group["energy_halfwidth"]),
            "yes" if group["settled"] else "no",
        )
    return table


def modes_table(report: ConvergenceReport) -> Table:
    """One row for each mode: its share of the energy with the interval, and its peak."""
    table = Table(title="Modes", title_justify="left", box=box.SIMPLE)
    for heading in ("mode", "share of energy", "low", "high", "peak frequency", "Strouhal"):
        table.add_column(heading, justify="right")
    for mode in report["modes"]:
        table.add_row(
            str(mode["mode"]),
            _percent(mode["energy_fraction"]),
            _percent(mode["energy_fraction_low"]),
            _percent(mode["energy_fraction_high"]),
            angle(mode.get("peak_frequency")),
            angle(mode.get("strouhal")),
        )
    return table


def number_lines(report: ConvergenceReport, time_unit: str) -> list[str]:
    """What the verdict rests on, one line each."""
    startup, drift = report["startup_snapshots"], report["stationarity"].get("drift_p_value")
    lines = [
        f"snapshots in the basis      {report['n_snapshots']:,} over {report['time_span']:.6g} {time_unit}",
        f"left out as start-up        {startup:,}",
        f"independent samples         {angle(report['effective_samples'])}",
        f"integral time               {angle(report['integral_time'])} {time_unit}",
        f"energy captured             {_percent(report['captured_energy_fraction'])}",
        f"drift, p-value              {angle(drift)}",
    ]
    return lines + [f"because: {reason['text']}" for reason in report["verdict"]["reasons"]]


def max_angle_of(declaration: Mapping[str, Any]) -> float:
    """The declared tolerance, degrees."""
    return float(declaration["criterion"]["max_angle_deg"])


def _or_infinite(group: GroupReport) -> float:
    bound: float | None = group["angle_bound_deg"]
    return float("inf") if bound is None else bound


def _percent(fraction: float | None) -> str:
    return "-" if fraction is None else f"{100 * fraction:.3g} %"
