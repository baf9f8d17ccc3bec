"""``slackwater wait`` and ``slackwater status``: words, JSON and exit codes, over a real service."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
import typer
from typer.testing import CliRunner, Result

from service.commands_wait import Exit, exit_code, register
from slackwater_client import Client, Run
from tests.clients.conftest import Service

Make = Callable[..., npt.NDArray[np.float32]]
Command = Callable[..., Result]

NOWHERE = "http://127.0.0.1:9"  # the discard port: nothing listens there


@pytest.fixture
def slackwater(service: Service) -> Command:
    """Run the command line against the shared service."""
    app = typer.Typer()
    register(app)

    def command(*arguments: str, url: str = service.url) -> Result:
        environment = {"SLACKWATER_URL": url, "COLUMNS": "160", "SLACKWATER_TOKEN": ""}
        return CliRunner().invoke(app, list(arguments), env=environment)

    return command


@pytest.fixture(scope="module")
def settled_run(service: Service) -> str:
    """Id of a closed run with two clear modes."""
    rng = np.random.default_rng(4)
    patterns = rng.normal(size=(2, 50))
    with Client(service.url) as client:
        run = client.declare(
            {
                "name": "flap [root]",
                "n_points": 50,
                "fields": [{"name": "p", "unit": "Pa"}],
                "time": {"unit": "s", "step": 0.1},
                "retained_rank": 6,
                "criterion": {"n_modes": 2},
            }
        )
        strengths = rng.normal(size=(2000, 2)) * [3.0, 1.0]
        run.post(strengths @ patterns + 0.05 * rng.normal(size=(2000, 50)), sequence=0)
        run.close()
        run.wait(20.0)
        return run.id


def _run_with(client: Client, declaration: dict[str, Any], snapshots: npt.NDArray[np.float32]) -> Run:
    run = client.declare(declaration)
    run.post(snapshots, sequence=0)
    run.close()
    run.wait(20.0)
    return run


@pytest.mark.parametrize(
    ("status", "state", "code"),
    [
        ("open", "settled", 0),
        ("closed", "settled", 0),
        ("open", "gathering", 3),
        ("closed", "unsettled", 3),
        ("open", "drifting", 4),
        ("open", "inseparable", 5),
        ("failed", "unsettled", 6),
        ("failed", "settled", 6),
        ("open", "a state of a newer service", 1),
    ],
)
def test_exit_codes(status: str, state: str, code: int) -> None:
    assert exit_code(status, state) == code


def test_exit_codes_are_documented_in_the_help(slackwater: Command) -> None:
    text = slackwater("wait", "--help").output
    for code in Exit:
        assert f"\n {int(code)}  " in text or f"{int(code)}  " in text


def test_wait_ends_with_0_when_settled(slackwater: Command, settled_run: str) -> None:
    done = slackwater("wait", settled_run, "--timeout", "10")
    assert done.exit_code == 0, done.output
    assert "flap [root]: settled" in done.stdout
    assert "2,000 snapshots" in done.stdout
    assert "of 10 deg" in done.stdout


def test_wait_gives_json_for_scripts(slackwater: Command, settled_run: str) -> None:
    done = slackwater("wait", settled_run, "--json")
    answer = json.loads(done.stdout)
    assert (answer["run"], answer["state"], answer["exit_code"]) == (settled_run, "settled", 0)
    assert answer["convergence"]["n_snapshots"] == 2000


def test_quiet_prints_nothing(slackwater: Command, settled_run: str) -> None:
    done = slackwater("wait", settled_run, "--quiet")
    assert (done.exit_code, done.output) == (0, "")


def test_wait_leaves_the_stop_file_when_settled(slackwater: Command, settled_run: str, tmp_path: Path) -> None:
    stop = tmp_path / "STOP"
    stop.write_text("left over from the last job, and longer than what comes now" * 9)
    assert slackwater("wait", settled_run, "--touch", str(stop)).exit_code == 0
    assert stop.read_text().startswith("flap [root]: settled · 2,000 snapshots")
    assert [path.name for path in tmp_path.iterdir()] == ["STOP"]
    assert slackwater("wait", settled_run, "--touch", str(stop), "--touch-text", "stop at next write").exit_code == 0
    assert stop.read_text() == "stop at next write\n"


def test_wait_leaves_no_stop_file_otherwise(
    slackwater: Command, client: Client, declaration: dict[str, Any], tmp_path: Path
) -> None:
    run = client.declare(declaration)
    assert slackwater("wait", run.id, "--timeout", "0.1", "--touch", str(tmp_path / "STOP")).exit_code == 3
    assert list(tmp_path.iterdir()) == []


def test_a_stop_file_without_a_place_is_refused_before_the_wait(slackwater: Command, tmp_path: Path) -> None:
    done = slackwater("wait", "no-such-run", "--touch", str(tmp_path / "missing" / "STOP"))
    assert done.exit_code == 1
    assert "is no directory" in done.stderr
    assert slackwater("wait", "no-such-run", "--touch", str(tmp_path)).exit_code == 1


def test_wait_ends_with_3_when_time_is_over(
    slackwater: Command, client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    run = client.declare(declaration)
    run.post(make_snapshots(32), sequence=0)
    done = slackwater("wait", run.id, "--timeout", "0.3")
    assert done.exit_code == 3, done.output
    assert "to go" in done.output or "gathering" in done.output


def test_wait_ends_with_4_when_drifting(
    slackwater: Command, client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    growth = np.linspace(0.2, 3.0, 2000)[:, None, None]
    run = _run_with(client, declaration, ((make_snapshots(2000) - 2.0) * growth).astype(np.float32))
    assert slackwater("wait", run.id).exit_code == 4


def test_wait_ends_with_5_when_inseparable(slackwater: Command, client: Client, declaration: dict[str, Any]) -> None:
    white = np.random.default_rng(6).normal(size=(2000, 2, 60)).astype(np.float32)
    run = _run_with(client, declaration, white)
    assert slackwater("wait", run.id).exit_code == 5


def test_wait_ends_with_7_when_nobody_answers(slackwater: Command) -> None:
    done = slackwater("wait", "anything", url=NOWHERE)
    assert done.exit_code == 7
    assert "127.0.0.1:9" in done.stderr


def test_wait_ends_with_8_for_an_unknown_run(slackwater: Command) -> None:
    assert slackwater("wait", "no-such-run").exit_code == 8


def test_wrong_usage_ends_with_2(slackwater: Command) -> None:
    assert slackwater("wait").exit_code == 2
    assert slackwater("wait", "x", "--timeout", "-1").exit_code == 2


def test_a_wrong_address_ends_with_1(slackwater: Command) -> None:
    assert slackwater("wait", "x", url="nonsense").exit_code == 1


def test_status_lists_all_runs(slackwater: Command, settled_run: str) -> None:
    done = slackwater("status")
    assert done.exit_code == 0, done.output
    row = next(line for line in done.stdout.splitlines() if settled_run in line)
    for expected in ("settled, closed", "2,000", "of 10"):
        assert expected in row


def test_status_shows_one_run_in_detail(slackwater: Command, settled_run: str) -> None:
    done = slackwater("status", settled_run)
    assert done.exit_code == 0, done.output
    for expected in ("flap [root]", "bound, deg", "share of energy", "because: ", "2,000 over"):
        assert expected in done.stdout


def test_status_gives_json(slackwater: Command, settled_run: str) -> None:
    one = json.loads(slackwater("status", settled_run, "--json").stdout)
    assert one["run"]["id"] == settled_run
    assert one["convergence"]["verdict"]["state"] == "settled"
    listed = json.loads(slackwater("status", "--json").stdout)
    assert settled_run in [entry["run"]["id"] for entry in listed["runs"]]


def test_status_says_when_nobody_answers_or_knows(slackwater: Command) -> None:
    assert slackwater("status", url=NOWHERE).exit_code == 7
    assert slackwater("status", "no-such-run").exit_code == 8
