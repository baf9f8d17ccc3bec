"""Trials of the stopping rule on processes whose modes are known, as a table."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor, as_completed
from multiprocessing import get_context

from rich.console import Console
from rich.progress import Progress
from rich.table import Table

from streaming.calibration.processes import PROCESSES
from streaming.calibration.summary import Share, Summary, summarise
from streaming.calibration.trial import Trial, run_trial


def names_of(wanted: list[str] | None) -> list[str]:
    """Return the processes asked for, all by default. Raises ValueError naming those that do not exist."""
    names = wanted or list(PROCESSES)
    unknown = sorted(set(names) - set(PROCESSES))
    if unknown:
        raise ValueError(f"no process {', '.join(unknown)}; there are {', '.join(PROCESSES)}")
    return names


def print_table(names: list[str], seeds: range, jobs: int, max_angle_deg: float) -> None:
    """Run the trials of each process with progress, and print a row for each."""
    table = _empty_table(len(seeds), max_angle_deg)
    with Progress(console=Console(stderr=True), transient=True) as progress:
        task = progress.add_task("trials", total=len(seeds) * len(names))
        for name in names:
            trials = []
            for trial in _trials(name, seeds, jobs, max_angle_deg):
                trials.append(trial)
                progress.advance(task)
            _add_row(table, name, summarise(trials))
    Console().print(table)


def _trials(name: str, seeds: range, jobs: int, max_angle_deg: float) -> Iterator[Trial]:
    if jobs == 1:
        yield from (run_trial(name, seed, max_angle_deg) for seed in seeds)
        return
    with ProcessPoolExecutor(jobs, mp_context=get_context("spawn")) as pool:
        for future in as_completed([pool.submit(run_trial, name, seed, max_angle_deg) for seed in seeds]):
            yield future.result()


def _empty_table(runs: int, max_angle_deg: float) -> Table:
    table = Table(title=f"{runs} trials each, tolerance {max_angle_deg:g} deg, 95 % confidence")
    table.add_column("process", no_wrap=True)
    for heading in (
        "stopped",
        "false stops",
        "coverage",
        "median stop",
        "stop / oracle",
        "stop / lasting",
        "naive false",
    ):
        table.add_column(heading, justify="right")
    return table


def _add_row(table: Table, name: str, summary: Summary) -> None:
    table.add_row(
        name,
        f"{summary.n_stopped}/{summary.n_trials}",
        _percent(summary.false_stops),
        f"{100 * summary.coverage.fraction:.1f} %",
        "-" if summary.median_stop is None else f"{summary.median_stop:.0f}",
        _ratio(summary.ratio),
        _ratio(summary.lasting_ratio),
        _percent(summary.naive_false_stops),
    )


def _ratio(value: float | None) -> str:
    return "-" if value is None else f"{value:.2f}"


def _percent(share: Share) -> str:
    if share.number == 0:
        return "-"
    low, high = share.interval()
    return f"{100 * share.fraction:.1f} % [{100 * low:.1f}, {100 * high:.1f}]"
