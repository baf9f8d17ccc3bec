"""How many more snapshots: the misalignment falls like the inverse square root of the record length."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scipy.stats import chi2

from streaming.report import SnapshotsToGo

# Looks that can change the verdict are spaced geometrically: peeking more often costs confidence, less often time.
LOOK_RATIO = 1.25

# Beyond this many times the record so far a forecast says nothing that a user could plan with.
MAX_RATIO = 1000.0


@dataclass(frozen=True)
class Need:
    """Record length needed, relative to the present one, with its interval."""

    estimate: float
    low: float
    high: float


def angle_need(
    sampling: float, truncation: float, tolerance: float, freedom: float, level: float = 0.9
) -> Need:
    """Record needed until sampling + truncation falls to the tolerance, all sines.

    The interval comes from the sampling of the variance behind ``sampling``, freedom * V / chi2.
    """
    room = tolerance - truncation
    if room <= 0.0:
        return Need(MAX_RATIO, MAX_RATIO, MAX_RATIO)
    ratio = (sampling / room) ** 2
    tail = (1.0 - level) / 2
    spread = chi2.ppf([tail, 1.0 - tail], freedom) / freedom
    return Need(ratio, ratio * float(spread[0]), ratio / float(spread[0]))


def longest(needs: list[Need]) -> Need:
    """The need that holds all the others back."""
    return Need(
        max(need.estimate for need in needs),
        max(need.low for need in needs),
        max(need.high for need in needs),
    )


def snapshots_to_go(
    need: Need, n_snapshots: int, looks_to_hold: int, time_step: float | None
) -> SnapshotsToGo | None:
    """Snapshots still to go: the need, brought up to the grid of looks, and the looks that must agree."""
    if need.estimate >= MAX_RATIO:
        return None
    estimate, low, high = (
        _up_to_look(n_snapshots, min(ratio, MAX_RATIO), looks_to_hold)
        for ratio in (need.estimate, need.low, need.high)
    )
    return SnapshotsToGo(
        estimate=estimate, low=low, high=high, time=None if time_step is None else estimate * time_step
    )


def _up_to_look(n_snapshots: int, ratio: float, looks_to_hold: int) -> int:
    looks = max(0, math.ceil(math.log(max(ratio, 1.0)) / math.log(LOOK_RATIO) - 1e-9))
    return math.ceil(n_snapshots * (LOOK_RATIO ** max(looks, looks_to_hold) - 1.0))
