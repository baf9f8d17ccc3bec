"""One shim, one nursery and one seed for the campaign; what was injected is printed at the end."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from tests.faults.forked import Nursery
from tests.faults.shim import compile_shim

# The bounded form takes about five minutes; SLACKWATER_FAULTS=20 hits twenty times as many calls, and 10000 hits all.
FACTOR = int(os.environ.get("SLACKWATER_FAULTS", "1"))
SECONDS = 600 * FACTOR  # for each test
SEED = int(os.environ.get("SLACKWATER_FAULTS_SEED", "20"))

N_AT_ONCE = 2

_INJECTED = "injected"


@pytest.fixture
def report(record_property: Callable[[str, object], None]) -> Callable[[str], None]:
    """Takes a line for the summary of the campaign; with the report of its test, so that any process may run that."""
    return lambda line: record_property(_INJECTED, line)


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    tests = [test for kind in ("passed", "failed") for test in terminalreporter.getreports(kind)]
    lines = [str(line) for test in tests for name, line in test.user_properties if name == _INJECTED]
    if lines:
        terminalreporter.section(f"faults injected (seed {SEED})")
        for line in lines:
            terminalreporter.write_line(line)


@pytest.fixture(scope="session")
def shim(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return compile_shim(tmp_path_factory.mktemp("shim"))


@pytest.fixture(scope="session")
def nurseries(shim: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[list[Nursery]]:
    """One for each service that runs at a time."""
    nurseries = [Nursery(shim, tmp_path_factory.mktemp("nursery")) for _ in range(N_AT_ONCE)]
    yield nurseries
    for nursery in nurseries:
        nursery.close()
