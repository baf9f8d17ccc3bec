"""The Fortran module against a real service: every form of a field arrives byte for byte, and errors come as text."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from slackwater_client import Client
from tests.clients.building import (
    C_CLIENT,
    C_WARNINGS,
    ROOT,
    Replay,
    Replayed,
    check_ended_on_advice,
    clean_environment,
    needed,
    run_tool,
)
from tests.clients.conftest import Service
from tests.clients.test_c_client import check_stored
from tests.clients.test_c_readme import blocks

Make = Callable[..., npt.NDArray[np.float32]]

FORTRAN_CLIENT = ROOT / "clients" / "fortran"
FORMS = Path(__file__).parent / "fortran" / "forms.f90"
FORTRAN_WARNINGS = ["-std=f2008", "-Wall", "-Wextra", "-Wpedantic", "-Werror"]


def build(directory: Path, program: Path) -> Path:
    """Compile a Fortran program with the module and the C client, all warnings as errors."""
    output = directory / program.stem
    run_tool(
        [needed("gcc"), *C_WARNINGS, "-g", "-O1", "-pthread", "-c", str(C_CLIENT / "slackwater.c"), "-o", "c.o"],
        directory,
    )
    run_tool(
        [
            *[
                needed("gfortran"),
                *FORTRAN_WARNINGS,
                "-g",
                "-O1",
                "-fcheck=all,no-array-temps",
                "-pthread",
                "-o",
                str(output),
            ],
            *[str(FORTRAN_CLIENT / "slackwater.f90"), str(program), "c.o"],
        ],
        directory,
    )
    return output


@pytest.fixture(scope="module")
def forms_program(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return build(tmp_path_factory.mktemp("fortran"), FORMS)


@pytest.fixture
def post_forms(forms_program: Path, tmp_path: Path) -> Callable[..., Replayed]:
    def post(url: str, declaration: Any, snapshots: Any, *run: str, wrapper: tuple[str, ...] = ()) -> Replayed:
        (tmp_path / "declaration.json").write_text(json.dumps(declaration))
        (tmp_path / "values").write_bytes(snapshots.tobytes())
        paths = [str(tmp_path / "declaration.json"), str(tmp_path / "values")]
        return Replay([*wrapper, str(forms_program), *paths, str(len(snapshots)), *run], url).result()

    return post


def test_every_form_of_a_field_arrives_byte_for_byte(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, post_forms: Any
) -> None:
    snapshots = make_snapshots(42)
    done = post_forms(service.url, declaration, snapshots)
    assert (done.code, done.state["sent"], done.state["error"]) == (0, 42, "")
    assert "a snapshot came without a time, those before with" in done.told
    run = client.run(done.state["run"])
    assert check_stored(run, snapshots, 8) == 6
    assert run.status == "closed"


def test_a_run_is_taken_up_again(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, post_forms: Any
) -> None:
    snapshots = make_snapshots(42)
    run = client.declare(declaration)
    run.post(snapshots[:10], 0, 0.5 * np.arange(10) + 1e-3 / 3.0)
    done = post_forms(service.url, declaration, snapshots, run.id)
    assert (done.code, done.state["skipped"], done.state["held"], done.state["sent"]) == (0, 10, 10, 32)
    assert check_stored(run, snapshots, 8, first=10, sequence=1) == 5


def test_errors_come_as_text_and_the_solver_runs_on(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, post_forms: Any
) -> None:
    done = post_forms(service.url, {**declaration, "colour": "red"}, make_snapshots(8))
    assert "no run: A value is missing or out of range (422): body.colour" in done.told
    assert (done.code, done.state["run"], done.state["sent"]) == (0, "", 0)
    done = post_forms("http://127.0.0.1:1", declaration, make_snapshots(8))
    assert "Connection refused" in done.told


def test_a_run_is_clean_under_valgrind(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, post_forms: Any
) -> None:
    wrapper = (needed("valgrind"), "--quiet", "--leak-check=full", "--error-exitcode=99")
    done = post_forms(service.url, declaration, make_snapshots(21), wrapper=wrapper)
    assert (done.code, done.state["sent"]) == (0, 21)
    assert "==" not in done.told  # what valgrind says begins with it


def test_the_example_ends_itself(service: Service, tmp_path: Path) -> None:
    needed("make"), needed("gfortran")
    for folder in ("c", "fortran"):
        shutil.copytree(ROOT / "clients" / folder, tmp_path / folder)
    (commands,) = blocks(FORTRAN_CLIENT / "README.md", "sh")
    done = subprocess.run(
        ["sh", "-ec", commands],
        cwd=tmp_path / "fortran",
        env=clean_environment(service.url),
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert (done.returncode, done.stderr) == (0, "")
    told = re.search(r"(\d+) steps, (\d+) snapshots sent, verdict: ", done.stdout)
    assert told is not None, done.stdout
    assert int(told[1]) < 400_000
    check_ended_on_advice(service.url, "roof membrane", int(told[2]))


def test_the_solver_of_the_readme_compiles_and_is_heard(service: Service, client: Client, tmp_path: Path) -> None:
    (block,) = blocks(FORTRAN_CLIENT / "README.md", "fortran")
    use, body = block.split("\n", 1)
    source = tmp_path / "solver.f90"
    source.write_text(
        f"program solver\n{use}\nuse, intrinsic :: iso_fortran_env, only: real64\nimplicit none\n"
        "real(real64) :: u(40, 30) = 0, v(40, 30) = 0, time = 0\ninteger :: step\n"
        f"integer, parameter :: n_steps = 400\n{body}\ncontains\nsubroutine advance()\n"
        "time = time + 0.5\nu(3, 4) = u(3, 4) + time\nv(5, 6) = v(5, 6) - time\nend subroutine\nend program\n"
    )
    program = build(tmp_path, source)
    done = subprocess.run([program], env=clean_environment(service.url), capture_output=True, text=True, timeout=60)
    assert (done.returncode, done.stderr, done.stdout) == (0, "", "")
    run = next(run for run in client.runs() if run.name == "air intake, 60 percent flap")
    assert (run.status, run.resource["n_snapshots"]) == ("closed", 20)
