"""Probes, version, metrics, and the plain pages for people."""

from __future__ import annotations

import platform
from importlib.metadata import version

from fastapi import APIRouter, Request
from fastapi.responses import HTMLResponse
from starlette.responses import JSONResponse, Response

from service import metrics, pages
from service.access import ServiceOf
from service.bodies import refusals
from service.problems import CATALOGUE, Problem

VERSION = version("slackwater")

router = APIRouter(tags=["service"])


@router.get("/livez")
async def livez() -> dict[str, str]:
    """The process answers."""
    return {"status": "alive"}


@router.get("/readyz", responses=refusals(503))
async def readyz(service: ServiceOf) -> dict[str, str]:
    """Batches are accepted: storage works and the worker runs."""
    service.poison.check()
    if not service.worker.is_alive():
        raise Problem("stopping", "the worker has ended; start the service again", retry_after_seconds=30)
    return {"status": "ready"}


@router.get("/version")
async def read_version() -> dict[str, str]:
    """What is running."""
    return {"slackwater": VERSION, "python": platform.python_version(), "numpy": version("numpy")}


@router.get(
    "/metrics",
    response_class=Response,
    responses={200: {"description": "OpenMetrics text", "content": {metrics.MEDIA_TYPE: {}}}},
)
def read_metrics(service: ServiceOf) -> Response:
    """Numbers for monitoring."""
    return Response(metrics.metrics_text(service), headers={"Content-Type": metrics.MEDIA_TYPE})


@router.get("/docs", response_class=HTMLResponse)
async def docs(request: Request) -> HTMLResponse:
    """Every operation, for people."""
    return HTMLResponse(pages.docs_page(request.app.openapi()))


@router.get("/openapi.json", response_class=JSONResponse)
async def openapi(request: Request) -> JSONResponse:
    """Every operation, for machines."""
    return JSONResponse(request.app.openapi())


@router.get("/problems/{kind}", response_class=HTMLResponse, responses=refusals(404))
async def problem_type(kind: str) -> HTMLResponse:
    """What a problem type means and what to do."""
    if kind not in CATALOGUE:
        raise Problem("not-found", f"there is no problem type {kind[:80]!r}; they are {', '.join(CATALOGUE)}")
    return HTMLResponse(pages.problem_page(kind))
