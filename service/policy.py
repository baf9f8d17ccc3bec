"""When to take a checkpoint and which ones to keep: pure decisions of the worker."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

# Older checkpoints stay this far apart in snapshots, so that their number grows with the logarithm of the record.
THINNING_RATIO = 1.5
# Share of the journal's bound after which a checkpoint is forced, since only checkpoints empty the journal: batches
# stay until the second newest checkpoint covers them, so up to twice this share is held, and intake keeps the rest.
JOURNAL_SHARE = 0.25


@dataclass(frozen=True)
class Progress:
    """What the worker knows when a block has just been applied; never inside a block, so that none is split.

    ``owed``: there was a look since the last checkpoint.
    """

    owed: bool
    turned_settled: bool
    n_checkpoints: int
    seconds_since_last: float
    last_cost_seconds: float
    uncovered_bytes: int


def checkpoint_due(progress: Progress, share: float, max_journal_bytes: int) -> bool:
    """True when a checkpoint is worth its time now.

    ``share`` is the largest fraction of time spent on checkpoints that only a look asks for.
    """
    if progress.n_checkpoints == 0 or progress.turned_settled:
        return True
    if progress.uncovered_bytes >= JOURNAL_SHARE * max_journal_bytes:
        return True
    return progress.owed and progress.last_cost_seconds <= share * progress.seconds_since_last


def surplus_checkpoints(numbers: Sequence[int], max_kept: int) -> list[int]:
    """Checkpoints to remove: the newest two stay, and older ones geometrically spaced, at most ``max_kept``."""
    newest_first = sorted(numbers, reverse=True)
    kept = newest_first[:2]
    for number in newest_first[2:]:
        if len(kept) < max_kept and number * THINNING_RATIO <= kept[-1]:
            kept.append(number)
    return [number for number in newest_first if number not in kept]


def covered_snapshots(numbers: Sequence[int], closed: bool) -> int:
    """Snapshots whose batches may leave the journal.

    Those of the second newest checkpoint, so that a damaged newest one can be made again; once the run is closed
    and nothing more will come, those of the newest.
    """
    newest_first = sorted(numbers, reverse=True)
    place = 0 if closed else 1
    return newest_first[place] if len(newest_first) > place else 0
