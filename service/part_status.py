"""How far the parts of a run are: which are late and since when, read from the registry."""

from __future__ import annotations

from datetime import UTC, datetime

from service.answers import PartResource, PartsStatus, PartStatus
from service.core import Service
from service.parts import find_declared
from service.records import PartRecord, RunRecord

# Enough to see every rank of a small job, and the slow ones of a large job.
MAX_LISTED_PARTS = 64


def parts_status(service: Service, run: RunRecord) -> PartsStatus | None:
    """The parts of a run, at most the 64 slowest one by one; None in a run without parts."""
    declared = run.declaration.parts
    if declared is None:
        return None
    since = service.reader.waiting_since(run.id)
    return PartsStatus.model_construct(
        n_parts=len(declared),
        n_late=0 if since is None else service.reader.late_parts(run.id, run.next_sequence),
        late_since=since,
        late_seconds=None if since is None else _seconds_since(since),
        slowest=[_status(service, run, one) for one in service.reader.slowest_parts(run.id, MAX_LISTED_PARTS)],
    )


def part_resource(service: Service, run: RunRecord, part: int) -> PartResource:
    """One part, and where its rank goes on. Raises the 404 and 409 problems."""
    find_declared(run, part)
    record = service.reader.part(run.id, part)
    assert record is not None  # entered with the run
    last = service.reader.batch(run.id, record.next_sequence - 1) if record.next_sequence else None
    begun = service.reader.batch(run.id, record.next_sequence)
    return PartResource.model_construct(
        **_status(service, run, record).model_dump(),
        last_time=None if last is None else last.last_time,
        expected_snapshots=None if begun is None else begun.n_snapshots,
    )


def _status(service: Service, run: RunRecord, record: PartRecord) -> PartStatus:
    assert run.declaration.parts is not None
    declared = run.declaration.parts[record.part]
    repeats = service.repeats.get(run.id, record.part)
    return PartStatus.model_construct(
        part=record.part,
        start=declared.start,
        stop=declared.stop,
        next_sequence=record.next_sequence,
        n_waiting=record.n_stored - run.next_sequence,  # all batches before the run's next one are complete
        last_stored=record.last_stored,
        n_repeats=repeats.n,
        last_repeat=repeats.last,
    )


def _seconds_since(at: str) -> float:
    return max(0.0, round((datetime.now(UTC) - datetime.fromisoformat(at)).total_seconds(), 3))
