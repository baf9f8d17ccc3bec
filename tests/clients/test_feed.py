"""``slackwater feed``: every format gives the bits of a direct post; resumed, it sends nothing twice."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
import typer
import zarr
from scipy.io import netcdf_file
from typer.testing import CliRunner, Result

from service.commands_feed import register
from service.feeding import series
from slackwater_client import Client
from tests.clients.conftest import Service

Values = npt.NDArray[Any]
Command = Callable[..., Result]
N, SHAPE = 80, (6, 10)
TIMES = 2.0 + 0.25 * np.arange(N)


@pytest.fixture
def slackwater(service: Service) -> Command:
    """Run the command against the shared service."""
    app = typer.Typer()
    app.command("other")(lambda: None)  # with two commands the first argument names one
    register(app)

    def command(*arguments: object, url: str = service.url) -> Result:
        environment = {"SLACKWATER_URL": url, "COLUMNS": "160", "SLACKWATER_TOKEN": ""}
        return CliRunner().invoke(app, ["feed", *map(str, arguments)], env=environment)

    return command


@pytest.fixture
def fields(make_snapshots: Callable[..., npt.NDArray[np.float32]]) -> Values:
    """Two fields on the grid, (80, 2, 6, 10)."""
    return make_snapshots(N).reshape(N, 2, *SHAPE)


@pytest.fixture
def declared(declaration: dict[str, Any], tmp_path: Path) -> Path:
    path = tmp_path / "duct.json"
    path.write_text(json.dumps({**declaration, "dtype": "float32"}))  # else that of the data, which text has not
    return path


def write_npy(folder: Path, fields: Values) -> Path:
    np.save(folder / "all.npy", fields)
    return folder / "all.npy"


def write_npy_time_last(folder: Path, fields: Values) -> Path:
    np.save(folder / "last.npy", np.asfortranarray(np.moveaxis(fields, 0, -1)))
    return folder / "last.npy"


def write_npz(folder: Path, fields: Values) -> Path:
    np.savez_compressed(folder / "all.npz", u=fields[:, 0], v=fields[:, 1].reshape(N, -1), time=TIMES)
    return folder / "all.npz"


def write_csv(folder: Path, fields: Values) -> Path:
    names = ["time [s]"] + [f"u{k}" for k in range(60)] + [f"v{k}" for k in range(60)]
    table = np.column_stack([TIMES, fields.reshape(N, -1)])
    np.savetxt(folder / "all.csv", table, delimiter=";", header="rig 3\n" + ";".join(names), fmt="%.9g")
    return folder / "all.csv"


def write_hdf5(folder: Path, fields: Values) -> Path:
    h5py = pytest.importorskip("h5py", reason="h5py is not installed here: HDF5 is not tested")
    with h5py.File(folder / "all.h5", "w") as file:
        file["probe/u"] = fields[:, 0]
        file.create_dataset("probe/v", data=fields[:, 1], chunks=(7, 6, 10), compression="gzip")
        file["time"] = TIMES
    return folder / "all.h5"


def write_netcdf4(folder: Path, fields: Values) -> Path:
    pytest.importorskip("h5netcdf", reason="h5netcdf is not installed here: NetCDF-4 is not tested")
    import xarray

    data = xarray.Dataset(
        {"v": (("y", "x", "time"), np.moveaxis(fields[:, 1], 0, -1)), "u": (("time", "y", "x"), fields[:, 0])},
        coords={"time": ("time", TIMES, {"units": "s"}), "y": 0.01 * np.arange(6), "x": 0.01 * np.arange(10)},
    )
    data.to_netcdf(folder / "all.nc", engine="h5netcdf")
    return folder / "all.nc"


def write_netcdf3(folder: Path, fields: Values) -> Path:
    with netcdf_file(folder / "old.nc", "w") as file:
        file.createDimension("time", None)
        file.createDimension("point", 60)
        file.createVariable("time", "d", ("time",))[:] = TIMES
        for k, name in enumerate("uv"):
            file.createVariable(name, "f", ("time", "point"))[:] = fields[:, k].reshape(N, 60)
    return folder / "old.nc"


def write_zarr(folder: Path, fields: Values) -> Path:
    group = zarr.open_group(folder / "all.zarr", mode="w")
    for k, name in enumerate("uv"):
        group.create_array(name, data=fields[:, k], chunks=(16, 6, 10), dimension_names=("time", "y", "x"))
    group.create_array("time", data=TIMES, dimension_names=("time",))
    return folder / "all.zarr"


def write_one_each(folder: Path, fields: Values) -> Path:
    (folder / "frames").mkdir()
    for k, one in enumerate(fields):
        np.save(folder / "frames" / f"frame{k:03d}.npy", one)
    return folder / "frames"


WRITERS = {
    "npy": (write_npy, (), False),
    "npy with time last": (write_npy_time_last, ("--time-axis", "-1"), False),
    "npz": (write_npz, (), True),
    "csv": (write_csv, (), True),
    "hdf5": (write_hdf5, ("--variable", "u=probe/u", "--variable", "v=/probe/v"), True),
    "netcdf4": (write_netcdf4, (), True),
    "netcdf3": (write_netcdf3, (), True),
    "zarr": (write_zarr, (), True),
    "one file each": (write_one_each, (), False),
}


@pytest.mark.parametrize("kind", WRITERS)
def test_every_format_gives_the_bits_of_a_direct_post(
    kind: str,
    slackwater: Command,
    client: Client,
    declaration: dict[str, Any],
    declared: Path,
    fields: Values,
    tmp_path: Path,
) -> None:
    write, options, timed = WRITERS[kind]
    written = write(tmp_path, fields)
    files = sorted(written.iterdir()) if kind == "one file each" else [written]
    done = slackwater(*files, "--declaration", declared, *options, "--json")
    assert done.exit_code == 0, done.output
    fed = client.run(json.loads(done.stdout)["run"])
    direct = client.declare(declaration)
    direct.post(fields.reshape(N, 2, 60), 0, TIMES if timed else None)
    direct.close()
    assert fed.status == "closed"
    times, coefficients = fed.coefficients()
    np.testing.assert_array_equal(times, TIMES if timed else 0.5 * np.arange(N))
    np.testing.assert_array_equal(coefficients, direct.coefficients()[1])
    np.testing.assert_array_equal(fed.modes(), direct.modes())
    np.testing.assert_array_equal(fed.mean(), direct.mean())


def test_a_declaration_is_made_from_the_data(
    slackwater: Command, client: Client, fields: Values, tmp_path: Path
) -> None:
    done = slackwater(
        write_netcdf4(tmp_path, fields),
        "--modes",
        2,
        "--max-angle-deg",
        12,
        "--campaign",
        "duct",
        "--leave-open",
        "--json",
    )
    assert done.exit_code == 0, done.output
    run = client.run(json.loads(done.stdout)["run"])
    told = run.declaration
    assert (told["name"], told["campaign"], told["n_points"], told["dtype"]) == ("all", "duct", 60, "float32")
    assert {one["name"] for one in told["fields"]} == {"u", "v"}
    assert told["time"] == {"unit": "s", "step": 0.25}
    assert told["grid"]["kind"] == "uniform"
    assert told["grid"]["shape"] == [6, 10]
    np.testing.assert_allclose(told["grid"]["spacing"], 0.01)
    assert (told["criterion"]["n_modes"], told["criterion"]["max_angle_deg"]) == (2, 12)
    assert run.status == "open"
    assert run.refresh()["n_snapshots"] == N


def test_packed_and_missing_values_are_read_as_cf_says(slackwater: Command, client: Client, tmp_path: Path) -> None:
    h5py = pytest.importorskip("h5py", reason="h5py is not installed here: HDF5 is not tested")
    packed = np.random.default_rng(2).integers(-900, 900, (40, 12)).astype(np.int16)
    with h5py.File(tmp_path / "taps.h5", "w") as file:
        file["p"] = packed
        file["p"].attrs.update(scale_factor=0.5, add_offset=100.0, _FillValue=np.int16(-999))
    done = slackwater(tmp_path / "taps.h5", "--modes", 2, "--json")
    assert done.exit_code == 0, done.output
    run = client.run(json.loads(done.stdout)["run"])
    np.testing.assert_allclose(run.mean()[0], (packed * 0.5 + 100.0).mean(axis=0), rtol=1e-12)
    with h5py.File(tmp_path / "taps.h5", "a") as file:
        file["p"][7, 3] = -999
    refused = slackwater(tmp_path / "taps.h5", "--modes", 2)
    assert refused.exit_code == 1
    assert "NaN" in refused.output


def test_an_interrupted_feed_goes_on_where_the_run_stands(
    slackwater: Command, client: Client, declaration: dict[str, Any], fields: Values, tmp_path: Path
) -> None:
    parts = []
    for k, (start, stop) in enumerate(((0, 30), (30, 45), (45, N))):
        np.savez(tmp_path / f"part{k}.npz", u=fields[start:stop, 0], v=fields[start:stop, 1], t=TIMES[start:stop])
        parts.append(tmp_path / f"part{k}.npz")
    run = client.declare(declaration)
    run.post(fields[:37].reshape(37, 2, 60), 0, TIMES[:37])  # what an earlier feed had sent, cut where no file ends
    done = slackwater(*parts, "--run", run.id)
    assert done.exit_code == 0, done.output
    assert "43 of 80 snapshots to post" in done.stderr
    np.testing.assert_array_equal(run.coefficients()[0], TIMES)
    direct = client.declare(declaration)
    direct.post(fields.reshape(N, 2, 60), 0, TIMES)
    direct.close()
    np.testing.assert_array_equal(run.modes(), direct.modes())


def test_other_files_than_before_are_refused(
    slackwater: Command, client: Client, declaration: dict[str, Any], fields: Values, tmp_path: Path
) -> None:
    np.savez(tmp_path / "later.npz", u=fields[:, 0], v=fields[:, 1], t=TIMES + 7.0)
    run = client.declare(declaration)
    run.post(fields[:37].reshape(37, 2, 60), 0, TIMES[:37])
    done = slackwater(tmp_path / "later.npz", "--run", run.id)
    assert done.exit_code == 1
    assert "snapshot 37 has time 18 in the files and 11 in the run" in done.output
    assert run.refresh()["n_snapshots"] == 37


def test_killed_in_the_middle_and_fed_again_each_snapshot_counts_once(
    service: Service, client: Client, tmp_path: Path
) -> None:
    data = np.random.default_rng(8).standard_normal((4000, 1, 500)).astype(np.float32)
    np.save(tmp_path / "long.npy", data)
    run = client.declare(
        {"name": "long", "n_points": 500, "fields": [{"name": "p"}], "retained_rank": 8, "criterion": {"n_modes": 2}}
    )
    command = [sys.executable, "-m", "service", "feed", str(tmp_path / "long.npy"), "--run", run.id]
    command += ["--url", service.url, "--max-batch-bytes", "40000"]  # 20 snapshots
    first = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        deadline = time.monotonic() + 30.0
        while run.refresh()["n_snapshots"] < 200 and time.monotonic() < deadline:
            time.sleep(0.01)
    finally:
        first.send_signal(signal.SIGKILL)
        first.wait(10.0)
    before = run.refresh()["n_snapshots"]
    assert 200 <= before < 4000
    subprocess.run(command[:-2], check=True, timeout=60)
    assert run.refresh()["n_snapshots"] == 4000
    np.testing.assert_allclose(run.mean()[0], data[:, 0].astype(np.float64).mean(axis=0), atol=1e-6)


def test_pieces_are_bounded_and_whole(fields: Values, declaration: dict[str, Any], tmp_path: Path) -> None:
    from service.feeding.choice import Choice
    from streaming import RunDeclaration

    planned = series.plan([write_npz(tmp_path, fields)], Choice(), RunDeclaration.model_validate(declaration))
    pieces = list(planned.pieces(3, max_bytes=5 * 120 * 4 + 1))
    assert max(len(one.snapshots) for one in pieces) == 5
    assert [one.first for one in pieces] == list(range(3, N, 5))
    np.testing.assert_array_equal(np.concatenate([one.snapshots for one in pieces]), fields[3:].reshape(-1, 2, 60))
    np.testing.assert_array_equal(np.concatenate([one.times for one in pieces]), TIMES[3:])


@pytest.mark.parametrize(
    ("write", "options", "text"),
    [
        (lambda f: f.write_bytes(b"nonsense"), (), "cannot be read as NPY"),
        (lambda f: np.save(f, np.zeros((4, 7, 60), np.float32)), (), "neither one snapshot of shape"),
        (
            lambda f: np.save(f, np.zeros((4, 2, 10, 6), np.float32)),
            (),
            "neither one snapshot of shape",
        ),  # x and y swapped
        (lambda f: np.save(f, np.zeros((4, 2, 60), complex)), (), "snapshots are real numbers"),
        (lambda f: np.save(f, np.zeros((4, 2, 60))), ("--time", "clock"), "holds no variable 'clock'"),
        (lambda f: np.save(f, np.zeros((4, 2, 60))), ("--variable", "u=data"), "--variable gives the fields u"),
        (lambda f: np.save(f, np.zeros((4, 2, 60))), ("--time-axis", "5"), "has no axis 5"),
        (lambda f: np.save(f, np.array([{}]), allow_pickle=True), (), "cannot be read as NPY"),
        (
            lambda f: np.savez(f.with_suffix(".npz"), data=np.zeros((4, 2, 60)), time=np.array(["noon"] * 4)),
            (),
            "as numbers",
        ),
    ],
)
def test_what_does_not_fit_is_said_before_anything_is_declared(
    write: Callable[[Path], None],
    options: tuple[str, ...],
    text: str,
    slackwater: Command,
    client: Client,
    declared: Path,
    tmp_path: Path,
) -> None:
    before = len(client.runs())
    write(tmp_path / "bad.npy")
    done = slackwater(next(tmp_path.glob("bad.*")), "--declaration", declared, *options)
    assert done.exit_code == 1, done.output
    assert text in done.output
    assert len(client.runs()) == before


def test_a_reader_that_is_not_installed_says_what_to_install(
    slackwater: Command, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "h5py", None)  # as if it were not there
    (tmp_path / "a.h5").write_bytes(b"")
    done = slackwater(tmp_path / "a.h5")
    assert done.exit_code == 1
    assert "pip install 'slackwater[readers]'" in done.output


def test_wrong_usage_and_other_ends_have_their_codes(slackwater: Command, fields: Values, tmp_path: Path) -> None:
    path = write_npy(tmp_path, fields)
    assert slackwater(path, "--variable", "=x").exit_code == 2
    assert slackwater(tmp_path / "missing.npy").exit_code == 1
    assert slackwater(tmp_path).exit_code == 1
    assert (
        slackwater(
            path,
            url="http://127.0.0.1:9",
        ).exit_code
        == 7
    )
    assert slackwater(path, "--run", "no-such-run").exit_code == 8


def test_text_tables_as_people_write_them(tmp_path: Path) -> None:
    from service.feeding.opening import open_data

    (tmp_path / "a.txt").write_text("1 2 3\n4 5 6\n\n7 8 9\n")
    (tmp_path / "b.tsv").write_text('t\t"p 1"\t"p 2"\n0.0\t1\t2\n0.5\t3\t4\n')
    (tmp_path / "c.csv").write_text("# made by the rig\n\ufeff\n1.0,2\n3,x\n")
    a = open_data(tmp_path / "a.txt").variables
    np.testing.assert_array_equal(a["data"].cut(0, 1, 3), [[4, 5, 6], [7, 8, 9]])
    np.testing.assert_array_equal(a["data"].cut(0, 0, 1), [[1, 2, 3]])  # back to the start
    b = open_data(tmp_path / "b.tsv").variables
    np.testing.assert_array_equal(b["t"].whole(), [0.0, 0.5])
    np.testing.assert_array_equal(b["p"].whole(), [[1, 2], [3, 4]])
    with pytest.raises(ValueError, match="data rows 1 to 2"):
        open_data(tmp_path / "c.csv").variables["data"].whole()
