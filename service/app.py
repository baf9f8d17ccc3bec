"""The web application: routes, guards and translations around one `Service`."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any

from fastapi import FastAPI
from pydantic.json_schema import models_json_schema

from service import (
    routes_batches,
    routes_campaigns,
    routes_events,
    routes_export,
    routes_page,
    routes_parts,
    routes_plain,
    routes_results,
    routes_runs,
    routes_signals,
)
from service.answers import ProblemDocument
from service.core import Service
from service.headers import SecurityHeaders
from service.middleware import Guard
from service.readiness import tell_manager
from service.translation import install

DESCRIPTION = (
    "Streams snapshots of unsteady flows into an evolving POD basis and says when the leading modes have settled. "
    "It advises; a person stops the machine."
)


def create_app(service: Service) -> FastAPI:
    """The application for a service that has been opened; its lifespan starts and closes the service."""

    @asynccontextmanager
    async def lifespan(_: FastAPI) -> AsyncIterator[None]:
        service.start()
        tell_manager("READY=1")  # the socket listens already, and recovery is done
        try:
            yield
        finally:
            tell_manager("STOPPING=1")
            await asyncio.to_thread(service.close)

    app = FastAPI(
        title="Slackwater",
        version=routes_plain.VERSION,
        description=DESCRIPTION,
        lifespan=lifespan,
        openapi_url=None,  # served by a route of ours, so that it is listed like all others
        docs_url=None,
        redoc_url=None,
    )
    app.state.service = service
    for routes in (
        routes_runs,
        routes_batches,
        routes_parts,
        routes_export,  # before the results: /modes/1.vti is no mode called 1.vti
        routes_results,
        routes_signals,
        routes_campaigns,
        routes_events,
        routes_page,
        routes_plain,
    ):
        app.include_router(routes.router)
    install(app)
    app.add_middleware(Guard, settings=service.settings)
    app.add_middleware(SecurityHeaders)  # outermost: also on what the guard refuses
    _describe_problems(app)
    return app


def _describe_problems(app: FastAPI) -> None:
    """Refusals are problem documents everywhere, also those that the framework itself gives."""
    describe = app.openapi

    def described() -> dict[str, Any]:
        if app.openapi_schema is None:
            schema = describe()
            _, models = models_json_schema(
                [(ProblemDocument, "serialization")], ref_template="#/components/schemas/{model}"
            )
            schemas = schema["components"]["schemas"]
            schemas.update(models["$defs"])
            for unused in ("HTTPValidationError", "ValidationError"):
                schemas.pop(unused, None)
            _replace_validation(schema)
        return app.openapi_schema or {}

    app.openapi = described  # type: ignore[method-assign]


def _replace_validation(schema: dict[str, Any]) -> None:
    """The framework describes its own 422; ours is a problem document."""
    content = {"application/problem+json": {"schema": {"$ref": "#/components/schemas/ProblemDocument"}}}
    for operations in schema["paths"].values():
        for operation in operations.values():
            if "422" in operation["responses"]:
                operation["responses"]["422"] = {"description": "refused", "content": content}
