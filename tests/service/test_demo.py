"""The demonstration: its solver against closed forms and its own documented flow, and the whole of it at work."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path

import httpx
import numpy as np
import pytest
import zarr
from threadpoolctl import threadpool_limits

from service.demo import duct
from service.demo.command import prepared
from service.demo.intake import BrokenFlowError, check_flow
from service.demo.lattice import Lattice, Openings
from service.demo.processes import DemoError, address_of, program
from service.demo.screen import Sight, plain_line
from streaming.declaration import RunDeclaration

DEMO_SECONDS = 150.0  # far above the minute it takes alone on two cores


@pytest.fixture(autouse=True)
def _one_thread() -> Iterator[None]:
    """As the solver runs: its products of small matrices gain nothing from more threads."""
    with threadpool_limits(1):
        yield


def test_a_closed_box_keeps_its_mass() -> None:
    solid = np.zeros((30, 50), dtype=np.bool_)
    solid[10:16, 20:27] = True
    lattice = Lattice(solid, 0.01, None)
    lattice.start(np.full(30, 0.08, dtype=np.float32))
    for _ in range(600):
        lattice.step()
    assert abs(lattice.mass()) < 1e-6 * solid.size
    assert np.abs(np.stack(lattice.velocity())).max() > 0.01  # it still moves


def test_a_shear_layer_between_walls_decays_as_the_heat_equation_says() -> None:
    """u = sin(pi y / h) exp(-nu (pi / h)^2 t), exact for the Navier-Stokes equations between resting walls."""
    ny, viscosity, n_steps = 32, 0.02, 2000
    wave = np.sin(np.pi * (np.arange(ny) + 0.5) / ny)
    lattice = Lattice(np.zeros((ny, 4), dtype=np.bool_), viscosity, None)
    lattice.start((0.05 * wave).astype(np.float32))
    for _ in range(n_steps):
        lattice.step()
    expected = 0.05 * wave * np.exp(-viscosity * (np.pi / ny) ** 2 * n_steps)
    np.testing.assert_allclose(lattice.velocity()[0][:, 1], expected, rtol=0, atol=0.005 * expected.max())


def test_an_even_inflow_becomes_the_parabola_of_plane_channel_flow() -> None:
    """u / mean = 6 y (1 - y), plane Poiseuille flow (White, Viscous Fluid Flow, sec. 3-2, from memory)."""
    ny, nx, speed, reynolds = 24, 160, 0.03, 10.0
    inflow = np.full(ny, speed, dtype=np.float32)
    lattice = Lattice(np.zeros((ny, nx), dtype=np.bool_), speed * ny / reynolds, Openings(inflow))
    lattice.start(inflow)
    for _ in range(8000):
        lattice.step()
    y = (np.arange(ny) + 0.5) / ny
    profile = lattice.velocity()[0][:, 120]
    np.testing.assert_allclose(profile / profile.mean(), 6 * y * (1 - y), atol=0.02)
    flux = lattice.moments[1].sum(axis=0)
    assert np.ptp(flux[1:-1]) < 1e-3 * flux.mean()  # what enters leaves


def test_the_intake_sheds_at_its_documented_rate_and_lets_out_what_it_takes_in() -> None:
    flow = duct.IntakeFlow()
    flow.advance(4800)
    behind, rates = np.empty(128), np.empty((128, 2))
    for k in range(len(behind)):
        flow.advance(duct.STEPS_PER_SNAPSHOT)
        behind[k] = flow.fields()[1, 24, 80]  # across the duct, two bar heights behind the largest bar
        rates[k] = flow.flow_rates()
        check_flow(flow)
    n_padded = 16 * len(behind)
    power = np.abs(np.fft.rfft((behind - behind.mean()) * np.hanning(len(behind)), n_padded)) ** 2
    frequency = np.argmax(power) / (n_padded * duct.STEPS_PER_SNAPSHOT * duct.STEP_S)
    low, high = duct.SHEDDING_STROUHAL
    assert low < frequency * duct.BAR_HEIGHT_M / duct.SPEED_M_S < high
    assert behind.std() > 0.2 * duct.SPEED_M_S
    assert rates[:, 0].mean() == pytest.approx(rates[:, 1].mean(), rel=0.01)


def test_the_scenario_is_what_it_says() -> None:
    declaration = RunDeclaration.model_validate(duct.declaration("intake"))
    assert declaration.grid_shape == duct.IntakeFlow().fields().shape[1:]
    assert pytest.approx(140.0) == duct.REYNOLDS
    viscosity = duct.lattice_viscosity()[0]
    assert duct.LATTICE_SPEED * duct.BAR_HEIGHT_M / duct.CELL_M / viscosity == pytest.approx(140.0)


def test_a_broken_solution_is_not_posted() -> None:
    flow = duct.IntakeFlow()
    check_flow(flow)
    flow._lattice.moments[1, 3, 3] = np.nan
    with pytest.raises(BrokenFlowError, match="nan"):
        check_flow(flow)


def test_a_directory_that_holds_something_is_refused(tmp_path: Path) -> None:
    assert prepared(tmp_path / "new").is_dir()
    with pytest.raises(DemoError, match="not empty"):
        prepared(tmp_path)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["new"]


def test_a_program_ends_with_its_context_and_its_failure_is_told(tmp_path: Path) -> None:
    seen = []

    def work() -> None:
        with program("server", "http.server", ["--bind", "127.0.0.1", "0"], tmp_path / "log") as server:
            seen.append((server, server.running))
            raise RuntimeError("stop here")

    with pytest.raises(RuntimeError, match="stop here"):
        work()
    assert seen[0][1]
    assert not seen[0][0].running
    failing = program("service", "service", ["serve", "--port", "-3"], tmp_path / "failing.log")
    with failing as failed, pytest.raises(DemoError, match="ended with code"):
        address_of(failed)


def test_the_first_line_says_that_the_flow_starts() -> None:
    line = plain_line(Sight(0, 4000, duct.declaration("intake"), 2.4, None))
    assert line == "   2 s  0 posted · the flow is starting up"


def started_demo(directory: Path) -> subprocess.Popen[str]:
    command = [sys.executable, "-m", "service", "demo", "--directory", str(directory)]
    clean = {name: value for name, value in os.environ.items() if not name.startswith("SLACKWATER_")}
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, env=clean)


def address_in(line: str) -> str:
    return next(word.rstrip(",") for word in line.split() if word.startswith("http://127.0.0.1:"))


def is_up(url: str) -> bool:
    try:
        return httpx.get(f"{url}/livez", trust_env=False, timeout=5.0).status_code == 200
    except httpx.TransportError:
        return False


def programs_with(argument: str) -> list[Path]:
    """Running programs that have ``argument`` on their command line, as the solver has the address."""
    if not Path("/proc/self/cmdline").exists():
        pytest.skip("running programs are looked up in /proc, which this system has not")
    found = []
    for path in Path("/proc").glob("[0-9]*/cmdline"):
        with suppress(OSError):  # it has ended meanwhile
            if argument.encode() in path.read_bytes().split(b"\0"):
                found.append(path)
    return found


@pytest.mark.campaign
@pytest.mark.timeout(200)
def test_the_demonstration_settles_before_its_plan_ends(tmp_path: Path) -> None:
    with started_demo(tmp_path / "demo") as process:
        try:
            text, _ = process.communicate(timeout=DEMO_SECONDS)
        finally:
            process.kill()
    assert process.returncode == 0, text
    assert "settled · " in text
    assert "would have taken 4,000" in text
    assert "Not for certification or safety decisions." in text
    assert not is_up(address_in(text))
    pictures = sorted((tmp_path / "demo" / "pictures").glob("*.png"))
    assert [path.name for path in pictures] == [
        f"{what}-{field}.png" for what in ("mean", "mode-1", "mode-2") for field in "uv"
    ]
    checkpoint = next(line for line in text.splitlines() if line.startswith("Checkpoint")).split(": ", 1)[1]
    assert zarr.open_group(checkpoint, mode="r")["mode_v"].shape[1:] == (96, duct.RECORDED_CELLS)


@pytest.mark.campaign
@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_an_interrupted_demonstration_leaves_nothing_running(tmp_path: Path, number: signal.Signals) -> None:
    with started_demo(tmp_path / "demo") as process:
        try:
            assert process.stdout is not None
            url = address_in(process.stdout.readline())
            process.stdout.readline()  # the run is declared: the solver runs as well
            assert is_up(url)
            assert programs_with(url)
            process.send_signal(number)
            process.wait(30.0)
        finally:
            process.kill()
    assert process.returncode in (130, 143)
    assert not is_up(url)
    assert not programs_with(url)
    assert not programs_with(str(tmp_path / "demo" / "data"))
