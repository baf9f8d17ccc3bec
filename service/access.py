"""How handlers reach the parts of the running service."""

from __future__ import annotations

from typing import Annotated, cast

from fastapi import Depends, Request

from service.core import Service


async def _service(request: Request) -> Service:
    return cast(Service, request.app.state.service)


ServiceOf = Annotated[Service, Depends(_service)]
