"""Requests to the service: address, token, timeouts; every failure comes out as one of our errors."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import httpx
import numpy as np
import numpy.typing as npt

from slackwater_client.errors import SlackwaterError, refusal, unreachable
from slackwater_client.npy import NpyBody, from_npy

Parameters = Mapping[str, str | int | float | Sequence[float]]

CONNECT_SECONDS = 5.0  # a service in reach accepts at once; a longer wait only hides a wrong address


class Transport:
    """One pooled connection to one service; may be used from several threads."""

    def __init__(self, url: str, token: str | None, timeout_seconds: float) -> None:
        self.url = _checked_url(url)
        self._timeout_seconds = timeout_seconds
        headers = {"Authorization": f"Bearer {token}"} if token else {}
        # trust_env off: a site-wide proxy must not swallow requests to a service on this machine or cluster
        self._http = httpx.Client(
            base_url=self.url,
            headers=headers,
            timeout=httpx.Timeout(timeout_seconds, connect=min(CONNECT_SECONDS, timeout_seconds)),
            trust_env=False,
        )

    def close(self) -> None:
        self._http.close()

    def json(
        self,
        method: str,
        path: str,
        *,
        body: object = None,
        params: Parameters | None = None,
        wait_seconds: float = 0.0,
        headers: Mapping[str, str] | None = None,
    ) -> Any:
        """Send JSON (or nothing) and give back the JSON of the answer (None for an empty one).

        ``wait_seconds`` is how long the service was asked to hold the answer; it is added to the timeout.
        """
        arguments: dict[str, Any] = {"json": body} if body is not None else {}
        response = self._send(
            method,
            path,
            params=params,
            headers={"Accept": "application/json", **(headers or {})},
            timeout=httpx.Timeout(self._timeout_seconds + wait_seconds, connect=CONNECT_SECONDS),
            **arguments,
        )
        return _parsed(response)

    def send_array(
        self,
        method: str,
        path: str,
        body: NpyBody,
        params: Parameters | None = None,
        headers: Mapping[str, str] | None = None,
    ) -> Any:
        """Send an array as NPY and give back the JSON of the answer (None for an empty one)."""
        sent = {"Accept": "application/json", **body.headers(), **(headers or {})}
        return _parsed(self._send(method, path, params=params, headers=sent, content=_stream(body)))

    def array(self, path: str, params: Parameters | None = None) -> npt.NDArray[np.floating[Any]]:
        """Read an NPY answer."""
        response = self._send("GET", path, params=params, headers={"Accept": "application/x-npy"})
        try:
            return from_npy(response.content)
        except ValueError as error:
            raise SlackwaterError(f"{response.url} did not answer with an NPY array: {error}") from error

    def _send(self, method: str, path: str, **arguments: Any) -> httpx.Response:
        try:
            response = self._http.request(method, path, **arguments)
        except httpx.TransportError as error:
            raise unreachable(self.url, error) from error
        if response.status_code >= 400:
            raise refusal(response)
        return response


def _stream(body: NpyBody) -> Iterator[bytes]:
    for chunk in body.chunks():
        yield bytes(chunk)


def _parsed(response: httpx.Response) -> Any:
    if not response.content:
        return None
    try:
        return response.json()
    except ValueError as error:
        raise SlackwaterError(f"{response.url} did not answer with JSON; is it a Slackwater service?") from error


def _checked_url(url: str) -> str:
    try:
        parsed = httpx.URL(url)
    except httpx.InvalidURL as error:
        raise ValueError(f"{url!r} is not a URL ({error}); it should look like http://127.0.0.1:8350") from error
    if parsed.scheme not in ("http", "https") or not parsed.host:
        raise ValueError(f"{url!r} is not an address of a service; it should look like http://127.0.0.1:8350")
    return url.rstrip("/")
