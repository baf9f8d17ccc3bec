"""The campaign demonstration: its panel as documented, and the whole of it at work."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from service.demo.rig import BURST_SNAPSHOTS, COLUMNS, MAX_BURSTS, NOISE_PA, POINTS, ROWS, patterns, snapshots
from service.demo.tunnel import declaration
from streaming.declaration import RunDeclaration
from tests.service.serving import RunningService


def test_the_panel_is_as_documented() -> None:
    for point in POINTS:
        shapes = patterns(point.incidence_deg)
        np.testing.assert_allclose(shapes @ shapes.T, np.eye(3), atol=1e-12)
        assert RunDeclaration.model_validate(declaration(point)).n_points == ROWS * COLUMNS
    steady = snapshots(POINTS[0], 3000).reshape(3000, -1)
    energies = np.linalg.svd(steady - steady.mean(axis=0), compute_uv=False) ** 2 / 3000
    assert energies[0] < 1.2 * energies[1]  # a travelling wave is a pair
    assert energies[1] > 2.0 * energies[2]
    assert energies[2] > 20.0 * energies[3]
    assert energies[3] < NOISE_PA**2 * (1.0 + np.sqrt(ROWS * COLUMNS / 3000)) ** 2 * 1.1  # edge of white noise
    drifting = next(point for point in POINTS if point.growth)
    halves = np.split(snapshots(drifting, 3000), 2)
    assert halves[1].var() > 2.0 * halves[0].var()
    np.testing.assert_array_equal(snapshots(POINTS[1], 50), snapshots(POINTS[1], 50))


@pytest.mark.campaign
@pytest.mark.timeout(400)
def test_the_whole_campaign_says_of_each_point_what_it_is(tmp_path: Path) -> None:
    demo = [sys.executable, "-m", "service", "demo", "tunnel", "--directory", str(tmp_path / "tunnel")]
    done = subprocess.run(demo, capture_output=True, text=True, timeout=380)
    assert done.returncode == 0, done.stdout + done.stderr
    with RunningService(tmp_path / "tunnel" / "data") as service:
        found = service.client.get("/v1/campaigns/roof panel in the tunnel").json()
    states = {point["labels"]["incidence_deg"]: point["verdict"] for point in found["points"]}
    assert states == {0: "settled", 15: "settled", 30: "drifting", 45: "settled", 60: "inseparable"}, done.stdout
    for point in found["points"]:
        folder = tmp_path / "tunnel" / f"point-{point['labels']['incidence_deg']}"
        n_files = len(list((folder / "done").iterdir()))
        assert point["n_snapshots"] == n_files * BURST_SNAPSHOTS
        assert not (folder / "refused").exists()
        assert json.dumps(point["labels"]["incidence_deg"]) in done.stdout
    assert found["points"][0]["n_snapshots"] < MAX_BURSTS * BURST_SNAPSHOTS / 2
