"""Refusals become errors of one tree; what may pass is tried again after a pause of the right length."""

from __future__ import annotations

import httpx
import pytest

from slackwater_client import (
    AccessError,
    BusyError,
    Client,
    ConflictError,
    InvalidError,
    NotFoundError,
    RefusedError,
    SlackwaterError,
    UnreachableError,
)
from slackwater_client.errors import MAX_RETRY_AFTER_SECONDS, DamagedError, parse_retry_after, refusal
from slackwater_client.patience import LONGEST_PAUSE_SECONDS, may_pass, pause_seconds, with_patience


def _refusal(status: int, kind: str = "some-kind", **headers: str) -> RefusedError:
    document = {"type": f"/problems/{kind}", "title": "No", "detail": "got 3, send 4", "status": status}
    return refusal(httpx.Response(status, json=document, headers=headers))


@pytest.mark.parametrize(
    ("status", "kind", "cls", "again"),
    [
        (400, "bad-request", InvalidError, False),
        (400, "digest-mismatch", DamagedError, True),
        (400, "torn-body", DamagedError, True),
        (401, "token-needed", AccessError, False),
        (404, "unknown-run", NotFoundError, False),
        (408, "idle-body", DamagedError, True),
        (409, "run-closed", ConflictError, False),
        (413, "body-too-large", InvalidError, False),
        (422, "not-finite", InvalidError, False),
        (429, "busy", BusyError, True),
        (500, "internal", RefusedError, True),
        (503, "stopping", BusyError, True),
        (507, "disk-full", BusyError, True),
        (418, "unforeseen", RefusedError, False),
    ],
)
def test_each_status_has_its_error(status: int, kind: str, cls: type[RefusedError], again: bool) -> None:
    error = _refusal(status, kind)
    assert type(error) is cls
    assert may_pass(error) is again
    assert (error.status, error.problem_type, error.detail) == (status, f"/problems/{kind}", "got 3, send 4")
    assert "got 3, send 4" in str(error)


def test_an_answer_that_is_no_problem_document_is_still_an_error() -> None:
    error = refusal(httpx.Response(502, text="<html>bad gateway</html>"))
    assert isinstance(error, BusyError)
    assert error.problem_type == "about:blank"


@pytest.mark.parametrize(
    ("value", "seconds"),
    [
        (None, 0.0),
        ("7", 7.0),
        ("-1", 0.0),
        ("nan", 0.0),
        ("Wed, 21 Oct 2026 07:28:00 GMT", 0.0),
        ("1e9", MAX_RETRY_AFTER_SECONDS),
    ],
)
def test_retry_after_is_read_in_seconds_and_bounded(value: str | None, seconds: float) -> None:
    assert parse_retry_after(value) == seconds


@pytest.mark.parametrize("attempt", [0, 1, 5, 50, 5000])
def test_pauses_spread_over_a_range_that_doubles_up_to_a_limit(attempt: int) -> None:
    error = UnreachableError("no answer")
    longest = pause_seconds(attempt, error, lambda: 1.0)
    assert pause_seconds(attempt, error, lambda: 0.0) == 0.0
    assert longest == min(0.2 * 2.0 ** min(attempt, 16), LONGEST_PAUSE_SECONDS)


def test_retry_after_is_a_floor_under_the_jitter() -> None:
    error = _refusal(503, "stopping", **{"Retry-After": "5"})
    assert pause_seconds(0, error, lambda: 0.0) == 5.0
    assert pause_seconds(0, error, lambda: 1.0) == pytest.approx(5.2)


def test_patience_ends_with_the_error_itself() -> None:
    tries = []

    def call() -> None:
        tries.append(1)
        raise UnreachableError("no answer")

    with pytest.raises(UnreachableError):
        with_patience(call, 0.3)
    assert len(tries) >= 2


def test_what_cannot_pass_is_not_tried_again() -> None:
    tries = []

    def call() -> None:
        tries.append(1)
        raise _refusal(422)

    with pytest.raises(InvalidError):
        with_patience(call, 60.0)
    assert len(tries) == 1


def test_nobody_there_is_unreachable_and_names_the_address() -> None:
    with Client("http://127.0.0.1:9") as client, pytest.raises(UnreachableError, match=r"127\.0\.0\.1:9"):
        client.runs()


@pytest.mark.parametrize("url", ["127.0.0.1:8350", "ftp://127.0.0.1", "http://", "nonsense"])
def test_an_address_that_cannot_work_is_refused_at_once(url: str) -> None:
    with pytest.raises(ValueError, match="8350"):
        Client(url)


def test_all_errors_have_one_root() -> None:
    for cls in (UnreachableError, InvalidError, BusyError, DamagedError, ConflictError):
        assert issubclass(cls, SlackwaterError)
