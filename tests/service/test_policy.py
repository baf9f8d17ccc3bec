"""When checkpoints are taken and which are kept."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.policy import Progress, checkpoint_due, covered_snapshots, surplus_checkpoints

QUIET = Progress(
    owed=False,
    turned_settled=False,
    n_checkpoints=2,
    seconds_since_last=10.0,
    last_cost_seconds=1.0,
    uncovered_bytes=0,
)


@pytest.mark.parametrize(
    ("change", "due"),
    [
        ({}, False),
        ({"owed": True}, False),  # a second in ten is more than the share
        ({"owed": True, "last_cost_seconds": 0.4}, True),
        ({"last_cost_seconds": 0.4}, False),
        ({"turned_settled": True}, True),
        ({"n_checkpoints": 0}, True),
        ({"uncovered_bytes": 250}, True),
        ({"uncovered_bytes": 249}, False),
    ],
)
def test_checkpoint_due(change: dict[str, object], due: bool) -> None:
    progress = replace(QUIET, **change)  # type: ignore[arg-type]
    assert checkpoint_due(progress, share=0.05, max_journal_bytes=1000) is due


@given(numbers=st.lists(st.integers(1, 10**6), unique=True, max_size=60), most=st.integers(3, 12))
def test_what_is_kept(numbers: list[int], most: int) -> None:
    kept = sorted(set(numbers) - set(surplus_checkpoints(numbers, most)), reverse=True)
    assert kept[:2] == sorted(numbers, reverse=True)[:2]
    assert len(kept) <= most
    assert all(older * 1.5 <= newer for newer, older in pairwise(kept[1:]))


def test_the_journal_is_kept_up_to_the_second_newest() -> None:
    assert covered_snapshots([], closed=False) == 0
    assert covered_snapshots([40], closed=False) == 0
    assert covered_snapshots([40, 80, 60], closed=False) == 60
    assert covered_snapshots([40, 80, 60], closed=True) == 80


def test_a_growing_run_keeps_few() -> None:
    kept: list[int] = []
    for number in range(20, 100_000, 20):
        kept.append(number)
        kept = [one for one in kept if one not in surplus_checkpoints(kept, 12)]
    assert len(kept) <= 12
