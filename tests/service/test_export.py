"""Exports open in the programs they are for: VTK, xarray, a text table; and hold the numbers of the arrays."""

from __future__ import annotations

import io
import xml.etree.ElementTree as ET
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from slackwater_client import Client
from tests.service.serving import NPY, RunningService, check_problem, npy, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks

Values = npt.NDArray[Any]
N = 96
GRIDS: dict[str, dict[str, Any]] = {
    "vti": {"kind": "uniform", "shape": [6, 8], "spacing": [0.1, 0.25], "origin": [1.0, -2.0]},
    "vtr": {"kind": "rectilinear", "axes": [[0.0, 0.1], [0.0, 0.5, 2.0], [1.0, 2.0, 3.0, 5.0, 8.0, 13.0, 21.0, 34.0]]},
    "vtp": {"kind": "points"},
}
POSITIONS = np.random.default_rng(4).uniform(-1.0, 1.0, (48, 2))


@pytest.fixture(scope="module")
def runs(service: RunningService) -> dict[str, str]:
    """One closed run for each kind of grid, and one without any."""
    made = {}
    for suffix, grid in {**GRIDS, "none": {"kind": "none"}}.items():
        made[suffix] = service.declare(grid=grid, name=f"panel <{suffix}> & Pa")
        if suffix == "vtp":
            with Client(service.url) as client:
                client.run(made[suffix]).put_positions(POSITIONS)
        service.put(made[suffix], 0, snapshots(0, N))
        assert service.client.post(f"/v1/runs/{made[suffix]}/close").status_code == 200
    return made


def fetch(service: RunningService, path: str, folder: Path) -> Path:
    answer = service.client.get(path)
    assert answer.status_code == 200, answer.text
    if "content-length" in answer.headers:
        assert int(answer.headers["content-length"]) == len(answer.content)
    name = answer.headers["content-disposition"].split('"')[1]
    (folder / name).write_bytes(answer.content)
    return folder / name


def opened(path: Path) -> Any:
    """The data set in a VTK XML file, by the reader of VTK for its kind."""
    pytest.importorskip("vtkmodules", reason="the package vtk is not installed here: VTK exports are not opened")
    from vtkmodules import vtkIOXML

    readers = {"vti": "ImageData", "vtr": "RectilinearGrid", "vtp": "PolyData"}
    reader = getattr(vtkIOXML, f"vtkXML{readers[path.suffix[1:]]}Reader")()
    assert reader.CanReadFile(str(path))
    reader.SetFileName(str(path))
    reader.Update()
    assert reader.GetErrorCode() == 0
    return reader.GetOutput()


def numbers(data: Any, name: str) -> Values:
    from vtkmodules.util.numpy_support import vtk_to_numpy

    return np.asarray(vtk_to_numpy(data.GetPointData().GetArray(name)))


def points(data: Any) -> Values:
    return np.array([data.GetPoint(k) for k in range(data.GetNumberOfPoints())])


def expected_points(suffix: str) -> Values:
    """Positions in the order of the rows: last axis fastest, and the last axis is x."""
    if suffix == "vti":
        y, x = np.meshgrid(1.0 + 0.1 * np.arange(6), -2.0 + 0.25 * np.arange(8), indexing="ij")
        return np.stack([x.ravel(), y.ravel(), np.zeros(48)], axis=1)
    if suffix == "vtr":
        z, y, x = np.meshgrid(*GRIDS["vtr"]["axes"], indexing="ij")
        return np.stack([x.ravel(), y.ravel(), z.ravel()], axis=1)
    return np.column_stack([POSITIONS, np.zeros(48)])


@pytest.mark.parametrize("suffix", GRIDS)
def test_vtk_opens_modes_mean_and_reconstruction(
    suffix: str, service: RunningService, runs: dict[str, str], tmp_path: Path
) -> None:
    base = f"/v1/runs/{runs[suffix]}"
    modes, mean = service.array(f"{base}/modes?n=2"), service.array(f"{base}/mean")
    data = opened(fetch(service, f"{base}/modes.{suffix}", tmp_path))
    np.testing.assert_allclose(points(data), expected_points(suffix), atol=1e-12)
    for k in range(2):
        for f, field in enumerate("pq"):
            np.testing.assert_array_equal(numbers(data, f"{field}_mode_{k + 1}"), modes[k, f])
    assert numbers(data, "p_mode_1").dtype == np.float32
    one = opened(fetch(service, f"{base}/modes/2.{suffix}", tmp_path))
    np.testing.assert_array_equal(numbers(one, "q_mode_2"), modes[1, 1])
    assert one.GetPointData().GetNumberOfArrays() == 2
    np.testing.assert_array_equal(numbers(opened(fetch(service, f"{base}/mean.{suffix}", tmp_path)), "p_mean"), mean[0])
    rebuilt = opened(fetch(service, f"{base}/reconstruction.{suffix}?time=0.5", tmp_path))
    np.testing.assert_array_equal(numbers(rebuilt, "q"), service.array(f"{base}/reconstruction?time=0.5")[1])


def test_points_are_drawn_as_vertices(service: RunningService, runs: dict[str, str], tmp_path: Path) -> None:
    data = opened(fetch(service, f"/v1/runs/{runs['vtp']}/mean.vtp", tmp_path))
    assert data.GetNumberOfVerts() == 48


def test_triangles_make_a_surface(service: RunningService, tmp_path: Path) -> None:
    run = service.declare(grid={"kind": "points"})
    triangles = np.array([[0, 1, 2], [1, 2, 47], [5, 4, 3]])
    path = f"/v1/runs/{run}/triangles"
    for wrong, kind in (
        (triangles + 1, "wrong-values"),
        (triangles - 1, "wrong-values"),
        (triangles + 0.5, "wrong-values"),
        (triangles[:, :2], "wrong-shape"),
        (triangles.astype(complex), "invalid-array"),
    ):
        check_problem(service.client.put(path, content=npy(wrong), headers=NPY), 422, kind)
    with Client(service.url) as client:
        client.run(run).put_positions(POSITIONS)
        client.run(run).put_triangles(triangles)
    assert service.client.put(path, content=npy(triangles.astype(np.int32)), headers=NPY).status_code == 204
    service.put(run, 0, snapshots(0, N))
    service.client.post(f"/v1/runs/{run}/close")
    data = opened(fetch(service, f"/v1/runs/{run}/mean.vtp", tmp_path))
    assert (data.GetNumberOfVerts(), data.GetNumberOfPolys()) == (0, 3)
    corners = [[data.GetCell(k).GetPointId(corner) for corner in range(3)] for k in range(3)]
    assert corners == triangles.tolist()
    check_problem(service.client.put(path, content=npy(triangles), headers=NPY), 409, "run-closed")


def test_what_cannot_be_exported_says_what_can(service: RunningService, runs: dict[str, str]) -> None:
    get = service.client.get
    wrong = check_problem(get(f"/v1/runs/{runs['vti']}/modes.vtp"), 404, "not-found")
    assert "modes.vti" in wrong["detail"]
    check_problem(get(f"/v1/runs/{runs['none']}/mean.vtp"), 422, "no-place")
    check_problem(get(f"/v1/runs/{runs['vti']}/modes.vti?n=99"), 422, "invalid-request")
    check_problem(get(f"/v1/runs/{runs['vti']}/modes/99.vti"), 422, "invalid-request")
    check_problem(get(f"/v1/runs/{runs['vti']}/reconstruction.vti?time=77"), 422, "invalid-request")
    check_problem(get(f"/v1/runs/{runs['vti']}/reconstruction?time=nan"), 422, "invalid-request")
    check_problem(get("/v1/runs/nobody/results.nc"), 404, "unknown-run")
    fresh = service.declare()
    for name in ("modes.vti", "reconstruction?time=0", "results.nc", "coefficients.csv", "singular-values.csv"):
        check_problem(get(f"/v1/runs/{fresh}/{name}"), 404, "not-yet")


def test_the_reconstruction_is_the_projection_on_the_modes(service: RunningService, runs: dict[str, str]) -> None:
    """Mean + projection of the snapshot on orthonormal modes; with more modes nearer to the snapshot (closed form)."""
    base = f"/v1/runs/{runs['none']}"
    mean = service.array(f"{base}/mean").reshape(96)
    snapshot = snapshots(0, N)[37].reshape(96).astype(np.float64)
    errors = []
    for n in (1, 2, 5):
        modes = service.array(f"{base}/modes?n={n}").reshape(n, 96).astype(np.float64)
        answer = service.client.get(f"{base}/reconstruction", params={"time": 0.3712, "n": n})
        rebuilt = np.load(io.BytesIO(answer.content)).reshape(96)
        np.testing.assert_allclose(rebuilt, mean + (modes @ (snapshot - mean)) @ modes, atol=2e-3 * abs(snapshot).max())
        errors.append(np.linalg.norm(rebuilt - snapshot))
        assert float(answer.headers["slackwater-time"]) == pytest.approx(0.37)
        left_out = float(answer.headers["slackwater-left-out-fraction"])
    assert errors == sorted(errors, reverse=True)
    fluctuations = snapshots(0, N).reshape(N, 96) - mean
    kept = np.linalg.norm(fluctuations @ modes.T) ** 2
    assert left_out == pytest.approx(1.0 - kept / np.linalg.norm(fluctuations) ** 2, rel=0.02)
    told = service.client.get(f"{base}/reconstruction?time=0.37&n=5", headers={"Accept": "application/json"}).json()
    assert told["shape"] == [2, 48]
    assert (told["time"], told["n_modes"]) == (pytest.approx(0.37), 5)
    np.testing.assert_allclose(np.array(told["values"]).reshape(96), rebuilt)


def test_the_series_opens_file_by_file_at_its_times(
    service: RunningService, runs: dict[str, str], tmp_path: Path
) -> None:
    base = f"/v1/runs/{runs['vtr']}"
    answer = service.client.get(f"{base}/reconstruction.zip?start=0.095&stop=0.2&every=2&n=1")
    assert answer.status_code == 200, answer.text
    with zipfile.ZipFile(io.BytesIO(answer.content)) as archive:
        assert archive.testzip() is None
        archive.extractall(tmp_path)
    listed = ET.parse(tmp_path / "series.pvd").getroot().findall("./Collection/DataSet")
    assert [float(one.get("timestep", "")) for one in listed] == pytest.approx([0.1, 0.12, 0.14, 0.16, 0.18, 0.2])
    for one in listed:
        values = service.array(f"{base}/reconstruction?time={one.get('timestep')}&n=1")
        np.testing.assert_array_equal(numbers(opened(tmp_path / one.get("file", "")), "p"), values[0])
    check_problem(service.client.get(f"{base}/reconstruction.zip?start=7&stop=8"), 422, "invalid-request")


@pytest.mark.parametrize("suffix", [*GRIDS, "none"])
def test_xarray_opens_the_netcdf_file(
    suffix: str, service: RunningService, runs: dict[str, str], tmp_path: Path
) -> None:
    xarray = pytest.importorskip("xarray", reason="xarray is not installed here: NetCDF exports are not opened")
    base = f"/v1/runs/{runs[suffix]}"
    with xarray.open_dataset(fetch(service, f"{base}/results.nc?n=3", tmp_path), engine="scipy") as data:
        assert data.attrs["Conventions"] == "CF-1.11"
        assert data.attrs["title"] == f"panel <{suffix}> & Pa"
        modes = service.array(f"{base}/modes?n=3")
        np.testing.assert_array_equal(data["mode_q"].values.reshape(3, 48), modes[:, 1])
        np.testing.assert_array_equal(data["mean_p"].values.reshape(48), service.array(f"{base}/mean")[0])
        assert data["mean_p"].attrs["units"] == "Pa"
        np.testing.assert_array_equal(data["coefficient"].values, service.array(f"{base}/coefficients?n=3"))
        np.testing.assert_array_equal(data["time"].values, service.array(f"{base}/times"))
        np.testing.assert_array_equal(data["singular_value"].values, service.array(f"{base}/singular-values"))
        if suffix == "vti":
            assert data["mode_p"].dims == ("mode", "y", "x")
            np.testing.assert_allclose(data["x"].values, -2.0 + 0.25 * np.arange(8))
        if suffix == "vtp":
            np.testing.assert_array_equal(data["mean_p"].coords["y"].values, POSITIONS[:, 1])


def test_tables_hold_every_digit(service: RunningService, runs: dict[str, str], tmp_path: Path) -> None:
    base = f"/v1/runs/{runs['vti']}"
    table = fetch(service, f"{base}/coefficients.csv?n=3", tmp_path)
    assert table.read_text().splitlines()[0] == "time,mode_1,mode_2,mode_3"
    read = np.loadtxt(table, delimiter=",", skiprows=1)
    np.testing.assert_array_equal(read[:, 0], service.array(f"{base}/times"))
    np.testing.assert_array_equal(read[:, 1:], service.array(f"{base}/coefficients?n=3"))
    last = np.loadtxt(fetch(service, f"{base}/coefficients.csv?n=3&last=5", tmp_path), delimiter=",", skiprows=1)
    np.testing.assert_array_equal(last, read[-5:])
    values = np.loadtxt(fetch(service, f"{base}/singular-values.csv", tmp_path), delimiter=",", skiprows=1)
    np.testing.assert_array_equal(values[:, 1], service.array(f"{base}/singular-values"))
