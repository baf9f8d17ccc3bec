"""The README and the example of the C client work as they stand."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

from slackwater_client import Client
from tests.clients.building import C_CLIENT, check_ended_on_advice, clean_environment, compiled, needed
from tests.clients.conftest import Service

README = C_CLIENT / "README.md"


def blocks(path: Path, language: str) -> list[str]:
    """Code blocks of one language in a README."""
    return re.findall(rf"^```{language}\n(.*?)^```$", path.read_text(), re.MULTILINE | re.DOTALL)


def test_the_solver_of_the_readme_compiles_and_is_heard(service: Service, client: Client, tmp_path: Path) -> None:
    (block,) = blocks(README, "c")
    include, body = block.split("\n", 1)
    source = tmp_path / "solver.c"
    source.write_text(
        f"#include <stdio.h>\n{include}\n"
        "static float u[1200], v[1200];\nstatic double time;\nstatic const long n_steps = 400;\n"
        "static void advance(void)\n{\n    time += 0.5;\n    u[7] += (float)time;\n    v[9] -= (float)time;\n}\n"
        f"int main(void)\n{{\n{body}\nreturn 0;\n}}\n"
    )
    program = compiled(tmp_path / "solver", [source, C_CLIENT / "slackwater.c"])
    done = subprocess.run([program], env=clean_environment(service.url), capture_output=True, text=True, timeout=60)
    assert (done.returncode, done.stderr) == (0, "")
    run = next(run for run in client.runs() if run.name == "air intake, 40 percent flap")
    assert (run.status, run.resource["n_snapshots"]) == ("closed", 20)


def test_the_example_ends_itself(service: Service, tmp_path: Path) -> None:
    needed("make"), needed("cc")
    for name in ("Makefile", "mixing_duct.c", "slackwater.c", "slackwater.h"):
        shutil.copy(C_CLIENT / name, tmp_path)
    (commands,) = blocks(README, "sh")
    done = subprocess.run(
        ["sh", "-ec", commands],
        cwd=tmp_path,
        env=clean_environment(service.url),
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert (done.returncode, done.stderr) == (0, "")
    told = re.search(r"(\d+) steps, (\d+) snapshots sent, verdict: ", done.stdout)
    assert told is not None, done.stdout
    assert int(told[1]) < 400_000
    check_ended_on_advice(service.url, "mixing duct", int(told[2]))
