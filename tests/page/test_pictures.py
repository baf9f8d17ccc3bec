"""What is drawn is what the service holds: colours, cells, orientation, fields, and pictures of scattered points."""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from service.colours import diverging, sequential
from tests.page.conftest import Watched, until
from tests.page.flows import COLUMNS, ROWS
from tests.page.posting import declare, post
from tests.service.serving import RunningService, npy

pytestmark = pytest.mark.timeout(120)


def test_the_scales_are_those_of_the_service(page: Any) -> None:
    for name, scale in (("DIVERGING", diverging()), ("SEQUENTIAL", sequential())):
        table = page.evaluate(f"import('/page/colours.js').then((scales) => [...scales.{name}])")
        shown = np.array(table).reshape(-1, 3)
        expected = 255 * np.asarray(scale.colors)
        assert shown.shape == expected.shape
        assert np.abs(shown - expected).max() <= 1.0


def _cells(page: Any, mode: int) -> np.ndarray:
    """Colours (rows, columns, 3) at the middle of each cell of a picture, first row at the bottom."""
    pixels = page.evaluate(
        """([label, rows, columns]) => { const canvas = document.querySelector(`canvas[aria-label^='${label}']`);
            const pen = canvas.getContext("2d"); const found = [];
            for (let r = 0; r < rows; r += 1) for (let c = 0; c < columns; c += 1) {
                const x = Math.floor(canvas.width * (c + 0.5) / columns);
                const y = Math.floor(canvas.height * (1 - (r + 0.5) / rows));
                found.push(...pen.getImageData(x, y, 1, 1).data.slice(0, 3)); }
            return found; }""",
        [f"Mode {mode},", ROWS, COLUMNS],
    )
    return np.array(pixels).reshape(ROWS, COLUMNS, 3)


def _expected(values: np.ndarray) -> np.ndarray:
    top = np.abs(values).max()
    return 255 * diverging()((values / top + 1) / 2)[..., :3]


@pytest.mark.parametrize("kind", ["uniform", "rectilinear"])
def test_cells_have_the_colours_of_their_values(
    watch: Callable[..., Watched], service: RunningService, kind: str
) -> None:
    axes = [list(0.01 * np.arange(ROWS)), list(0.01 * np.arange(COLUMNS))]
    grid = {"kind": "uniform", "shape": [ROWS, COLUMNS], "spacing": [0.01, 0.01]}
    run = declare(service, grid=grid if kind == "uniform" else {"kind": kind, "axes": axes})
    post(service, run, 0, 320)
    service.client.post(f"/v1/runs/{run}/close")
    watched = watch(service.url)
    watched.provoked = "Canvas2D: Multiple readback"  # that the test reads the pictures
    page = watched.open(f"/runs/{run}")
    for field, name in enumerate("uv"):
        page.get_by_label(f"{name} (m/s)").check()
        page.locator(f".picture canvas[aria-label='Mode 2, {name}, at 320 snapshots']").wait_for()
        values = service.array(f"/v1/runs/{run}/modes/2")[field].reshape(ROWS, COLUMNS)
        shown = _cells(page, 2)
        away = min(np.abs(shown - _expected(sign * values)).max() for sign in (1, -1))
        assert away <= 6.0  # one step of the scale, and rounding


def test_a_pair_has_its_portrait(watch: Callable[..., Watched], service: RunningService) -> None:
    run = declare(service)
    post(service, run, 0, 640)
    service.client.post(f"/v1/runs/{run}/close")
    groups = service.client.get(f"/v1/runs/{run}/convergence").json()["groups"]
    assert [2, 3] in [group["modes"] for group in groups]  # the travelling pair of the made-up flow
    page = watch(service.url).open(f"/runs/{run}")
    page.locator(".chart.portrait canvas").wait_for()
    page.locator(".pair", has_text="travelling").wait_for()
    peak = service.client.get(f"/v1/runs/{run}/convergence").json()["modes"][1]["strouhal"]
    page.locator(".spectrapart .chart canvas").wait_for()
    words = page.locator(".spectrapart .note").inner_text()
    shown = float(re.search(r"mode 2 at ([0-9.]+)", words).group(1))
    width = float(re.search(r"closer than ([0-9.]+)", words).group(1))
    assert abs(shown - peak) <= width
    page.locator(".noveltypart .note", has_text="lie beyond a limit").wait_for()
    page.get_by_role("button", name="Show the pair in motion").click()
    moving = page.get_by_label("The pair in motion")
    moving.wait_for()
    first = moving.evaluate("(canvas) => canvas.toDataURL()")
    until(lambda: moving.evaluate("(canvas) => canvas.toDataURL()") != first)
    page.get_by_role("button", name="Stop").click()


def test_turning_one_way(page: Any) -> None:
    """A circle sweeps all its area one way; a straight line and independent noise do not."""
    found = page.evaluate(
        """import("/page/portrait.js").then(({ turning }) => {
            const steps = Array.from({ length: 200 }, (_, i) => i);
            const ring = [steps.map((i) => Math.cos(0.3 * i)), steps.map((i) => Math.sin(0.3 * i))];
            const line = [steps.map((i) => Math.cos(0.3 * i)), steps.map((i) => 0.5 * Math.cos(0.3 * i))];
            return [turning(...ring), turning(ring[1], ring[0]), turning(...line)]; })"""
    )
    assert found[0] == pytest.approx(1.0)
    assert found[1] == pytest.approx(-1.0)
    assert abs(found[2]) < 0.5


def _scattered(service: RunningService, n_points: int) -> str:
    rng = np.random.default_rng(4)
    places = rng.uniform(size=(n_points, 2)).astype(np.float32)
    run = declare(service, n_points=n_points, grid={"kind": "points"}, retained_rank=4, block_length=8,
                  criterion={"n_modes": 2})  # fmt: skip
    headers = {"Content-Type": "application/x-npy"}
    assert service.client.put(f"/v1/runs/{run}/positions", content=npy(places), headers=headers).status_code == 204
    wave = np.stack([np.sin(9 * places[:, 0]), np.cos(9 * places[:, 1])])
    for sequence in range(2):
        strength = rng.standard_normal((8, 1, 1)) * wave[::-1] + rng.standard_normal((8, 1, 1)) * wave
        noise = 0.1 * rng.standard_normal((8, 2, n_points))
        assert service.put(run, sequence, (strength + noise).astype(np.float32)).status_code == 201
    service.applied(run, 16, 60.0)
    service.client.post(f"/v1/runs/{run}/close")
    return run


@pytest.mark.parametrize("n_points", [400, pytest.param(1_000_000, marks=pytest.mark.campaign)])
def test_scattered_points_are_drawn_by_the_service(
    watch: Callable[..., Watched], service: RunningService, n_points: int
) -> None:
    run = _scattered(service, n_points)
    page = watch(service.url).open(f"/runs/{run}")
    picture = page.locator(".picture img[alt='Mode 1, u, at 16 snapshots']")
    picture.wait_for()
    until(lambda: picture.evaluate("(image) => image.naturalWidth") > 300, 60.0)
    page.get_by_label("v (m/s)").check()
    page.locator(".picture img[alt='Mode 1, v, at 16 snapshots']").wait_for()
