"""A series posted to a run: continued where the run stands, so that nothing is sent twice or left out."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from service.feeding.series import MAX_BATCH_BYTES, Series
from service.feeding.variables import FeedError
from slackwater_client import Receipt, Run

TIME_TOLERANCE = 1e-9  # relative, far above the rounding of a number in an address


@dataclass(frozen=True)
class Place:
    """Where a run stands: the number of its next batch, and how many snapshots it holds."""

    sequence: int
    n_snapshots: int
    last_time: float | None


def place_of(run: Run) -> Place:
    """Where the run stands now. Raises FeedError when it cannot be continued."""
    resource: dict[str, Any] = run.refresh()
    if resource["waiting"] is not None:
        raise FeedError(
            f"run {run.id} misses batch {resource['waiting']['missing_sequence']} while later ones are stored; another "
            "program posts to it, so it cannot be continued from files"
        )
    if resource["status"] != "open":
        raise FeedError(f"run {run.id} is {resource['status']}; declare another run for these files")
    return Place(int(resource["next_sequence"]), int(resource["n_snapshots"]), resource["last_time"])


def check_continues(series: Series, place: Place) -> None:
    """Raise FeedError when what the run holds is not the beginning of the series."""
    if place.n_snapshots > series.n_snapshots:
        raise FeedError(
            f"the run holds {place.n_snapshots} snapshots, the files {series.n_snapshots}; these are other files"
        )
    if place.n_snapshots == 0 or place.last_time is None:
        return
    expected = series.time_of(place.n_snapshots - 1)
    if expected is not None and abs(expected - place.last_time) > TIME_TOLERANCE * max(1.0, abs(expected)):
        raise FeedError(
            f"snapshot {place.n_snapshots} has time {expected:.9g} in the files and {place.last_time:.9g} in the run; "
            "name the same files in the same order as before"
        )


def post_series(
    series: Series, run: Run, place: Place, patience_seconds: float, max_batch_bytes: int = MAX_BATCH_BYTES
) -> Iterator[tuple[int, Receipt]]:
    """Post what the run does not hold yet; give the number of snapshots done and the receipt after each batch."""
    sequence = place.sequence
    for piece in series.pieces(place.n_snapshots, max_batch_bytes):
        receipt = run.post(piece.snapshots, sequence, piece.times, patience_seconds=patience_seconds)
        sequence += 1
        yield piece.first + len(piece.snapshots), receipt
