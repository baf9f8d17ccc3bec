"""The OpenAPI description lists every route, every body, and refusals as problem documents."""

from __future__ import annotations

from pathlib import Path

import pytest
from fastapi.routing import iter_route_contexts

from service.app import create_app
from service.core import Service
from service.settings import Settings
from tests.service.serving import RunningService

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks


def test_every_route_is_described(service: RunningService, tmp_path: Path) -> None:
    description = service.client.get("/openapi.json").json()
    listed = {(method.upper(), path) for path, one in description["paths"].items() for method in one}
    parts = Service(Settings(data_directory=tmp_path / "data"))
    try:
        served = {
            (method, route.path.replace(":path}", "}"))
            for route in iter_route_contexts(create_app(parts).routes)
            for method in (route.methods or set()) - {"HEAD"}
        }
    finally:
        parts.close()
    assert served == listed
    assert ("PUT", "/v1/runs/{run_id}/batches/{sequence}") in listed


def test_every_body_is_described(service: RunningService) -> None:
    description = service.client.get("/openapi.json").json()
    for path, operations in description["paths"].items():
        for method, operation in operations.items():
            takes_body = method in ("put", "patch") or (method == "post" and not path.endswith("/close"))
            assert ("requestBody" in operation) == takes_body, (method, path)
            if path.endswith(("/batches", "/batches/{sequence}", "/weights", "/positions", "/triangles")):
                assert "application/x-npy" in operation["requestBody"]["content"]


def test_refusals_are_problem_documents(service: RunningService) -> None:
    description = service.client.get("/openapi.json").json()
    for operations in description["paths"].values():
        for operation in operations.values():
            for status, answer in operation["responses"].items():
                if int(status) >= 400:
                    assert list(answer["content"]) == ["application/problem+json"]


def test_the_pages_need_no_network(service: RunningService) -> None:
    for path in ("/docs", "/problems/busy"):
        page = service.client.get(path)
        assert page.status_code == 200
        assert "http://" not in page.text
        assert "https://" not in page.text
        assert "<script>" not in page.text
        assert "<style" not in page.text
    docs = service.client.get("/docs").text
    for path in service.client.get("/openapi.json").json()["paths"]:
        assert path in docs
