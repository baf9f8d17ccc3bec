"""Campaigns: the points side by side, what they cost, and the angles between them."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import typer
from scipy.linalg import subspace_angles
from typer.testing import CliRunner, Result

from service.commands_campaign import register
from slackwater_client import Client
from tests.service.serving import RunningService, check_problem, declaration, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks

NAME = "roof panel, north / east"  # a slash and a comma, as people write them


@pytest.fixture(scope="module")
def points(service: RunningService) -> list[str]:
    """Two points of one flow and one of another, 400 snapshots each; the weights differ by point of the panel."""
    runs = []
    weights = np.linspace(0.5, 2.0, 48)
    for incidence, seed in ((0, 7), (4, 7), (8, 9)):
        labels = {"incidence_deg": incidence, "gauze": "fine"}
        run = service.declare(campaign=NAME, labels=labels, name=f"panel at {incidence} deg")
        with Client(service.url) as client:
            client.run(run).put_weights(weights)
        service.put(run, 0, snapshots(1000 * incidence, 1000 * incidence + 400, seed))
        assert service.client.post(f"/v1/runs/{run}/close").status_code == 200
        runs.append(run)
    service.declare(campaign="another one")
    return runs


def read(service: RunningService, between: str | None = None) -> dict[str, Any]:
    answer = service.client.get(
        "/v1/campaigns/roof panel, north %2F east", params={"between": between} if between else {}
    )
    assert answer.status_code == 200, answer.text
    found: dict[str, Any] = answer.json()
    return found


def test_points_stand_side_by_side_as_their_runs_say(service: RunningService, points: list[str]) -> None:
    found = read(service)
    assert [one["run"] for one in found["points"]] == points
    assert [one["labels"]["incidence_deg"] for one in found["points"]] == [0, 4, 8]
    for one in found["points"]:
        report = service.client.get(f"/v1/runs/{one['run']}/convergence").json()
        assert one["verdict"] == report["verdict"]["state"]
        assert one["total_energy"] == report["total_energy"]
        assert one["time_span"] == report["time_span"]
        assert len(one["modes"]) == 2
        for mode, told in zip(report["modes"], one["modes"], strict=False):
            assert told == {name: mode[name] for name in told}
        assert one["bound_deg"] == max(it["angle_bound_deg"] for it in report["groups"] if min(it["modes"]) <= 2)
        assert 0.0 < one["wall_seconds"] < 60.0
    assert found["totals"]["n_snapshots"] == 1200
    assert found["comparisons"] == []
    assert found["left_out"] == 0


def test_the_list_counts_verdicts(service: RunningService, points: list[str]) -> None:
    listed = {one["name"]: one for one in service.client.get("/v1/campaigns").json()["campaigns"]}
    assert listed[NAME]["n_points"] == 3
    assert listed[NAME]["n_snapshots"] == 1200
    assert sum(listed[NAME]["states"].values()) == 3
    assert listed["another one"]["states"] == {"gathering": 1}


def test_angles_between_points_agree_with_scipy_on_the_weighted_modes(
    service: RunningService, points: list[str]
) -> None:
    found = read(service, ",".join(points))
    root = np.sqrt(np.tile(np.linspace(0.5, 2.0, 48), 2))
    modes = {run: service.array(f"/v1/runs/{run}/modes?n=2").reshape(2, 96) * root for run in points}
    assert [one["between"] for one in found["comparisons"]] == [
        [points[0], points[1]],
        [points[0], points[2]],
        [points[1], points[2]],
    ]
    for one in found["comparisons"]:
        expected = np.degrees(np.sort(subspace_angles(modes[one["between"][0]].T, modes[one["between"][1]].T)))
        np.testing.assert_allclose(one["angles_deg"], expected, atol=1e-3)  # modes are float32
        assert one["angle_deg"] == one["angles_deg"][-1]
    same, different, _ = found["comparisons"]
    assert same["angle_deg"] < same["sampling_deg"]
    assert different["angle_deg"] > different["sampling_deg"]


def test_what_cannot_be_compared_is_refused(service: RunningService, points: list[str]) -> None:
    path = "/v1/campaigns/roof panel, north %2F east"
    check_problem(service.client.get("/v1/campaigns/nobody"), 404, "not-found")
    check_problem(service.client.get(path, params={"between": points[0]}), 422, "invalid-request")
    check_problem(service.client.get(path, params={"between": f"{points[0]},nobody"}), 422, "invalid-request")
    small = declaration(n_points=3, grid={"kind": "none"}, campaign="odd", criterion={"n_modes": 1}, retained_rank=4)
    runs = [service.client.post("/v1/runs", json=one).json()["id"] for one in (small, declaration(campaign="odd"))]
    check_problem(service.client.get("/v1/campaigns/odd", params={"between": ",".join(runs)}), 404, "not-yet")
    service.put(runs[0], 0, np.random.default_rng(1).standard_normal((20, 2, 3)))
    service.put(runs[1], 0, snapshots(0, 40))
    for run in runs:
        service.client.post(f"/v1/runs/{run}/close")
    problem = check_problem(
        service.client.get("/v1/campaigns/odd", params={"between": ",".join(runs)}), 422, "invalid-request"
    )
    assert "3 points" in problem["detail"]


def slackwater(service: RunningService, *arguments: str) -> Result:
    app = typer.Typer()
    app.command("other")(lambda: None)  # with two commands the first argument names one
    register(app)
    environment = {"SLACKWATER_URL": service.url, "COLUMNS": "200", "SLACKWATER_TOKEN": ""}
    return CliRunner().invoke(app, ["campaign", *arguments], env=environment)


def test_the_command_shows_a_table(service: RunningService, points: list[str], tmp_path: Path) -> None:
    done = slackwater(service, NAME, "--between", f"{points[0]},{points[2]}")
    assert done.exit_code == 0, done.output
    for expected in ("incidence_deg", "gauze", points[1], "400", "of 10", "1,200 snapshots in all", "deg over 2 modes"):
        assert expected in done.stdout
    assert NAME in slackwater(service).stdout
    found = json.loads(slackwater(service, NAME, "--json").stdout)
    assert [one["run"] for one in found["points"]] == points
    assert slackwater(service, "nobody").exit_code == 8
