"""``slackwater demo tunnel``: five test points of a campaign, written as files by a rig and watched in turn."""

from __future__ import annotations

import json
import time
from pathlib import Path

from rich.console import Console

from service.commands_campaign import detail
from service.demo.processes import START_SECONDS, DemoError, Program, address_of, program
from service.demo.rig import COLUMNS, POINTS, ROWS, SPACING_M, STEP_S, Point
from service.feeding.posted_list import NAME
from slackwater_client import Client, Run

CAMPAIGN = "roof panel in the tunnel"
MIN_DURATION_S = 10.0  # what the operator knows of the fan: less would not show that it still runs up
LOOK_SECONDS = 0.2
MAX_POINT_SECONDS = 300.0  # a point takes some ten seconds; this bounds it on a very slow machine


def run_tunnel(console: Console, directory: Path) -> int:
    """Measure all points, show them side by side, and return the exit code."""
    data = directory / "data"
    with program(
        "service", "service", ["serve", "--port", "0", "--data-directory", str(data)], directory / "log"
    ) as it:
        url = address_of(it)
        console.print(f"Service at {url}, data in {data}", highlight=False, soft_wrap=True)
        with Client(url) as client:
            for number, point in enumerate(POINTS):
                _measure(console, client, directory, number, point)
            found = client.campaign(CAMPAIGN)
            console.print(detail(found))
    console.print(
        "At 30 deg the fan was still running up: measure again. At 60 deg no third mode stands out: ask for two.\n"
        "Here the operator is played by this program; at a rig, a person moves on.",
        highlight=False,
    )
    return 0


def _measure(console: Console, client: Client, directory: Path, number: int, point: Point) -> None:
    """One test point: the rig writes, the folder is watched, and the operator moves on when it has settled."""
    folder = directory / f"point-{point.incidence_deg}"
    folder.mkdir()
    declared = directory / f"point-{point.incidence_deg}.json"
    declared.write_text(json.dumps(declaration(point)))
    watch = ["watch-folder", str(folder), "--declaration", str(declared), "--url", client.url, "--stop-when-settled"]
    watch += ["--settle", "0.1", "--poll", "0.05", "--end-after-idle", "5"]
    with program("watch", "service", watch, directory / f"watch-{number}.log") as watcher:
        _until_watching(watcher, folder)
        with program("rig", "service.demo.rig", [str(number), str(folder)], directory / f"rig-{number}.log") as rig:
            _wait(watcher, rig)
    run = _run_of(client, point)
    verdict = run.close()["verdict"]
    text = verdict["reasons"][0]["text"] if verdict["reasons"] else ""
    n = run.refresh()["n_snapshots"]
    console.print(f"{point.incidence_deg:3d} deg: {verdict['state']} after {n:,} snapshots. {text}", highlight=False)


def _until_watching(watcher: Program, folder: Path) -> None:
    """The rig begins when somebody looks. Raises DemoError."""
    deadline = time.monotonic() + START_SECONDS
    while not (folder / NAME).exists():
        watcher.check()
        if time.monotonic() > deadline:
            raise DemoError(f"the watch did not start within {START_SECONDS:g} s; see {watcher.log}")
        time.sleep(LOOK_SECONDS / 4)


def _wait(watcher: Program, rig: Program) -> None:
    """Wait for the watch to end. Raises DemoError when a program fails, or nothing comes of it."""
    deadline = time.monotonic() + MAX_POINT_SECONDS
    while watcher.running:
        rig.check()
        if time.monotonic() > deadline:
            raise DemoError(f"a test point took more than {MAX_POINT_SECONDS:g} s; see {watcher.log}")
        time.sleep(LOOK_SECONDS)
    watcher.check()


def _run_of(client: Client, point: Point) -> Run:
    name = str(declaration(point)["name"])
    found = next((run for run in client.runs() if run.name == name), None)
    if found is None:
        raise DemoError(f"nothing was posted for {name}")
    return found


def declaration(point: Point) -> dict[str, object]:
    """What the files do not say of a test point."""
    return {
        "name": f"roof panel, {point.incidence_deg} deg",
        "campaign": CAMPAIGN,
        "labels": {"incidence_deg": point.incidence_deg},
        "n_points": ROWS * COLUMNS,
        "fields": [{"name": "p", "unit": "Pa"}],
        "dtype": "float32",
        "grid": {"kind": "uniform", "shape": [ROWS, COLUMNS], "spacing": [SPACING_M, SPACING_M]},
        "time": {"unit": "s", "step": STEP_S},
        "reference": {"length": SPACING_M * (ROWS - 1), "speed": 12.0},
        "retained_rank": 12,
        "criterion": {"n_modes": 3, "max_angle_deg": 10, "min_duration": MIN_DURATION_S},
    }
