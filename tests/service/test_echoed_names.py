"""What a client makes long, or impossible to encode, is not sent back as it came."""

from __future__ import annotations

import pytest

from tests.service.serving import RunningService, check_problem, declaration


@pytest.mark.parametrize("change", [{"a" * 10**6: 1}, {"name": "a" * 10**6}, {"dtype": "f" * 10**6}])
def test_a_long_name_is_shortened_in_the_refusal(service: RunningService, change: dict[str, object]) -> None:
    answer = service.client.post("/v1/runs", json=declaration() | change)
    check_problem(answer, 422, "invalid-request")
    assert len(answer.content) < 5000


@pytest.mark.parametrize(
    "text", [r'{"name": "\ud800"}', r'{"\ud800": 1}', r'{"dtype": "\udfff", "labels": {"\ud800": "x"}}']
)
def test_half_a_character_is_refused(service: RunningService, text: str) -> None:
    answer = service.client.post("/v1/runs", content=text, headers={"Content-Type": "application/json"})
    check_problem(answer, 422, "invalid-request")
