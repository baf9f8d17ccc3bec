"""The live page: its files, and the cookie with which a browser reads when a token is set."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Header, Path, Request
from fastapi.responses import HTMLResponse
from pydantic import Field
from starlette.responses import Response

from service.access import ServiceOf
from service.assets import assets
from service.bodies import refusals
from service.problems import Problem
from service.session import Session
from streaming.declaration import Model

router = APIRouter(tags=["page"])

IfNoneMatch = Annotated[str | None, Header(description="tag of the copy the browser has")]
NOTHING_NEW: dict[int | str, dict[str, object]] = {304: {"description": "nothing new"}}


class TokenGiven(Model):
    """The token as typed into the page."""

    token: str = Field(min_length=1, max_length=4096)


@router.get("/", response_class=HTMLResponse, responses=NOTHING_NEW)
async def front_page(if_none_match: IfNoneMatch = None) -> Response:
    """The live page: may it stop, how long still, which modes hold it back."""
    return _file("index.html", if_none_match)


@router.get("/page/{path:path}", response_class=Response, responses={**NOTHING_NEW, **refusals(404)})
async def page_file(
    path: Annotated[str, Path(max_length=200, description="file below service/static")],
    if_none_match: IfNoneMatch = None,
) -> Response:
    """One file of the live page."""
    return _file(path, if_none_match)


@router.post("/page/session", status_code=204, responses=refusals(401, 422))
async def open_session(given: TokenGiven, request: Request, service: ServiceOf) -> Response:
    """Exchange the token for a cookie that opens reading requests of this browser for thirty days."""
    token = service.settings.token
    if token is None:
        return Response(status_code=204)
    session = Session(token.get_secret_value().encode())
    cookie = session.cookie(given.token, secure=request.url.scheme == "https")
    if cookie is None:
        raise Problem("token-needed", "this is not the token of this service; ask whoever started it")
    return Response(status_code=204, headers={"Set-Cookie": cookie})


def _file(path: str, if_none_match: str | None) -> Response:
    asset = assets().get(path)
    if asset is None:
        raise Problem("not-found", f"the page has no file {path[:80]!r}")
    # Asked for again each time, so that page and service are never of two versions; a 304 costs nothing.
    headers = {"ETag": asset.etag, "Cache-Control": "no-cache"}
    if if_none_match is not None and asset.etag in if_none_match:
        return Response(status_code=304, headers=headers)
    return Response(asset.content, media_type=asset.media_type, headers=headers)
