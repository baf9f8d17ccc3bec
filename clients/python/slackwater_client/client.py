"""The way in: a client of one service, which declares runs and finds them again."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from types import TracebackType
from typing import Any
from urllib.parse import quote

from slackwater_client.run import Run
from slackwater_client.transport import Transport

DEFAULT_URL = "http://127.0.0.1:8350"


class Client:
    """A connection to one Slackwater service.

    Parameters
    ----------
    url : address; without it SLACKWATER_URL, else http://127.0.0.1:8350
    token : bearer token, if the service asks for one; without it SLACKWATER_TOKEN
    timeout : seconds without any progress after which a request counts as failed

    Raises
    ------
    ValueError : ``url`` is not an http or https address
    """

    def __init__(self, url: str | None = None, token: str | None = None, timeout: float = 30.0) -> None:
        self._transport = Transport(
            url or os.environ.get("SLACKWATER_URL") or DEFAULT_URL,
            token or os.environ.get("SLACKWATER_TOKEN"),
            timeout,
        )

    @property
    def url(self) -> str:
        return self._transport.url

    def declare(self, declaration: Mapping[str, Any]) -> Run:
        """Declare a run; the service gives it an id.

        Raises
        ------
        InvalidError : the declaration is not accepted; the message says which member and why
        """
        return Run(self._transport, self._transport.json("POST", "/v1/runs", body=dict(declaration)))

    def run(self, run_id: str) -> Run:
        """Find a run by its id.

        Raises
        ------
        NotFoundError : the service knows no such run
        """
        return Run(self._transport, self._transport.json("GET", f"/v1/runs/{quote(run_id, safe='')}"))

    def runs(self) -> list[Run]:
        """All runs of the service, newest first."""
        found: list[Run] = []
        page: str | None = "/v1/runs"
        while page is not None:
            answer = self._transport.json("GET", page)
            found += [Run(self._transport, resource) for resource in answer["runs"]]
            page = answer.get("next")
        return found

    def campaigns(self) -> list[dict[str, Any]]:
        """Campaigns of the service, by name, with the verdicts of their points counted."""
        return list(self._transport.json("GET", "/v1/campaigns")["campaigns"])

    def campaign(self, name: str, between: Sequence[str] = ()) -> dict[str, Any]:
        """The test points of a campaign side by side; with ``between``, angles between those runs (by id).

        Raises
        ------
        NotFoundError : no run belongs to such a campaign, or a run to compare has no result yet
        """
        params = {"between": ",".join(between)} if between else None
        return dict(self._transport.json("GET", f"/v1/campaigns/{quote(name, safe='')}", params=params))

    def close(self) -> None:
        """Give the connections back; runs and hooks made from this client end with it."""
        self._transport.close()

    def __enter__(self) -> Client:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()
