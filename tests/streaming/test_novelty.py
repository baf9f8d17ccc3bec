"""Novelty: silent on the same regime at its stated rate, and loud within one block of another one."""

from __future__ import annotations

import numpy as np
import pytest

from streaming import SnapshotStream
from streaming.novelty import ALARM_LEVEL, COLUMNS
from tests.streaming.conftest import MakeStream

OUTSIDE, OUTSIDE_LIMIT, DISTANCE, DISTANCE_LIMIT = range(len(COLUMNS))


def regime(n: int, seed: int = 5) -> np.ndarray:
    """Three structures with independent Gaussian amplitudes, in white noise, (n, 80)."""
    structures, _ = np.linalg.qr(np.random.default_rng(0).standard_normal((80, 3)))
    rng = np.random.default_rng(seed)
    out: np.ndarray = (rng.standard_normal((n, 3)) * [30, 20, 12]) @ structures.T + rng.standard_normal((n, 80))
    return out


@pytest.fixture
def learnt(make_stream: MakeStream) -> SnapshotStream:
    stream = make_stream(80, retained_rank=8, criterion={"n_modes": 3})
    stream.absorb(regime(6400))
    return stream


def test_false_alarms_come_at_their_stated_rate(learnt: SnapshotStream) -> None:
    _, rows = learnt.novelty()
    late = rows[1600:]
    for value, limit in ((OUTSIDE, OUTSIDE_LIMIT), (DISTANCE, DISTANCE_LIMIT)):
        assert (late[:, value] > late[:, limit]).mean() < 3 * ALARM_LEVEL
        assert np.quantile(late[:, value], 1 - ALARM_LEVEL) > 0.8 * late[-1, limit]


def test_nothing_is_known_at_first(learnt: SnapshotStream) -> None:
    _, rows = learnt.novelty()
    assert np.isnan(rows[:80, OUTSIDE_LIMIT]).all()
    assert np.isnan(rows[:16, DISTANCE]).all()
    assert np.isfinite(rows[200:]).all()


@pytest.mark.parametrize(
    ("name", "column"), [("dead tap", OUTSIDE), ("new structure", OUTSIDE), ("stronger flow", DISTANCE)]
)
def test_a_change_shows_within_one_block(learnt: SnapshotStream, name: str, column: int) -> None:
    changed = regime(16, seed=77)
    if name == "dead tap":
        changed[:, 11] = 40.0
    elif name == "new structure":
        changed += 25.0 * np.sin(np.arange(80)) * np.random.default_rng(1).choice([-1.0, 1.0], (16, 1))
    else:
        changed *= 3.0
    learnt.absorb(changed)
    _, rows = learnt.novelty()
    last = rows[-16:]
    assert (last[:, column] > last[:, column + 1]).mean() > 0.3


def test_a_limit_after_ten_blocks_is_of_use(make_stream: MakeStream) -> None:
    """The first block, which the empty basis does not foresee at all, must not count as usual."""
    stream = make_stream(80, retained_rank=8, criterion={"n_modes": 3})
    stream.absorb(regime(160))
    _, rows = stream.novelty()
    assert rows[-1, OUTSIDE_LIMIT] < 2.5 * np.median(rows[-16:, OUTSIDE])


def test_an_alarm_does_not_teach_the_limit(learnt: SnapshotStream) -> None:
    changed = regime(16 * 12, seed=78)
    changed[:, 11] += 300.0 * np.random.default_rng(2).choice([-1.0, 1.0], len(changed))
    _, before = learnt.novelty()
    learnt.absorb(changed)
    _, after = learnt.novelty()
    assert after[-1, OUTSIDE_LIMIT] < 2.0 * before[-1, OUTSIDE_LIMIT]
