"""Who may import whom: the engine knows no web, the web does no linear algebra, the client stands alone."""

from __future__ import annotations

import ast
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
WEB = {"service", "slackwater_client", "fastapi", "starlette", "uvicorn", "httpx", "asyncio", "http", "sqlite3"}
ALGEBRA = ("scipy.linalg", "numpy.linalg", "scipy.sparse")


def imported(file: Path) -> set[str]:
    """Full names of everything a file imports, at any level."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(file.read_text())):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found |= {node.module, *(f"{node.module}.{alias.name}" for alias in node.names)}
    return found


def files(folder: str) -> list[Path]:
    found = sorted((ROOT / folder).rglob("*.py"))
    assert found
    return found


@pytest.mark.parametrize("file", files("streaming"), ids=str)
def test_the_engine_knows_no_web(file: Path) -> None:
    assert not {name.split(".")[0] for name in imported(file)} & WEB


@pytest.mark.parametrize("file", [f for f in files("service") if "demo" not in f.parts], ids=str)
def test_the_service_does_no_linear_algebra(file: Path) -> None:
    assert not {name for name in imported(file) if name.startswith(ALGEBRA)}


@pytest.mark.parametrize("file", files("clients/python/slackwater_client"), ids=str)
def test_the_client_needs_numpy_and_httpx_only(file: Path) -> None:
    allowed = {"numpy", "httpx", "slackwater_client"} | set(sys.stdlib_module_names)
    assert {name.split(".")[0] for name in imported(file)} <= allowed
