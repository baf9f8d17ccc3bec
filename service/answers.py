"""What the service answers with, as frozen models that OpenAPI describes."""

from __future__ import annotations

from pydantic import Field, JsonValue

from service.board import Advice, Published
from service.records import Backlog, BatchRecord, RunRecord, Status
from streaming.declaration import Criterion, Model, Name, RunDeclaration
from streaming.report import Convergence, Reason, State, Stationarity, Verdict


class Waiting(Model):
    """Batches stored ahead of one that is missing or lacks parts; they are applied once it is whole."""

    missing_sequence: int
    n_batches: int


class ReceiptForecast(Model):
    """Snapshots still to go, with its interval."""

    estimate: int
    low: int
    high: int


class PartStatus(Model):
    """One part: how far it has come, and whether it is started again."""

    part: int
    start: int
    stop: int
    next_sequence: int = Field(description="number of the first batch of which this part is missing")
    n_waiting: int = Field(description="batches it has sent that wait for other parts or for batches before them")
    last_stored: str | None = Field(description="when it last sent something new")
    n_repeats: int = Field(description="batches it sent again since the service started, as after its own restart")
    last_repeat: str | None


class PartsStatus(Model):
    """The parts of a run, the slowest first."""

    n_parts: int
    n_late: int = Field(description="parts that what is stored waits for; 0 when nothing waits")
    late_since: str | None = Field(description="when the first batch came that now waits for them")
    late_seconds: float | None
    slowest: list[PartStatus] = Field(max_length=64)


class PartResource(PartStatus):
    """One part, and where its rank goes on."""

    last_time: float | None = Field(description="time of its last snapshot stored without a gap, when times are given")
    expected_snapshots: int | None = Field(description="snapshots that other parts have sent for its next batch")


class RunResource(Model):
    """A run: as declared, and how far it has come."""

    id: str
    status: Status
    reason: str | None = Field(description="why it failed")
    created: str
    declaration: RunDeclaration
    next_sequence: int = Field(description="sequence number of the first batch that is not stored, or lacks parts")
    n_snapshots: int = Field(description="snapshots stored without a gap")
    n_applied: int = Field(description="snapshots in the basis")
    applied_through: int | None = Field(description="last batch that the engine has taken")
    last_time: float | None = Field(description="time of the last snapshot stored without a gap, when times are given")
    waiting: Waiting | None
    parts: PartsStatus | None = Field(description="null in a run without parts")
    journal_bytes: int = Field(description="accepted bytes that no checkpoint covers yet")
    verdict: State
    advice: Advice
    snapshots_to_go: ReceiptForecast | None


class RunList(Model):
    runs: list[RunResource]
    next: str | None = Field(description="address of the next page")


class RunChange(Model):
    """What may change in a declared run."""

    labels: dict[Name, str | bool | int | float] | None = Field(default=None, max_length=64)
    criterion: Criterion | None = Field(default=None, description="only before the first batch")


class Receipt(Model):
    """The batch is durable; and the verdict as it stands."""

    sequence: int
    first_snapshot: int | None = Field(
        description="number of its first snapshot; null while a batch before it is missing"
    )
    n_snapshots: int
    duplicate: bool
    complete: bool = Field(description="all parts of this batch are stored; always true without parts")
    applied_through: int | None = Field(description="last batch that the engine has taken")
    verdict: State
    advice: Advice
    snapshots_to_go: ReceiptForecast | None


class History(Model):
    evaluations: list[Convergence]


class CheckpointResource(Model):
    n_snapshots: int
    at: str
    n_bytes: int
    archive: str


class CheckpointList(Model):
    checkpoints: list[CheckpointResource]


class ProblemDocument(Model):
    """A refusal, as in RFC 9457; further members name the offending values."""

    type: str
    title: str
    status: int
    detail: str
    errors: list[dict[str, JsonValue]] | None = None


def run_resource(
    run: RunRecord, published: Published, backlog: Backlog, last_time: float | None, parts: PartsStatus | None
) -> RunResource:
    """The run as it stands."""
    to_go = published.snapshots_to_go
    waiting = Waiting(missing_sequence=run.next_sequence, n_batches=backlog.n_waiting)
    return RunResource.model_construct(
        id=run.id,
        status=run.status,
        reason=run.reason,
        created=run.created,
        declaration=run.declaration,
        next_sequence=run.next_sequence,
        n_snapshots=run.next_snapshot,
        n_applied=published.n_applied,
        applied_through=published.applied_through,
        last_time=last_time,
        waiting=waiting if backlog.n_waiting else None,
        parts=parts,
        journal_bytes=backlog.n_bytes,
        verdict=published.verdict,
        advice=published.advice,
        snapshots_to_go=None if to_go is None else ReceiptForecast.model_validate(to_go),
    )


def receipt(record: BatchRecord, duplicate: bool, published: Published) -> Receipt:
    """The receipt of a batch, with the verdict that was last published."""
    to_go = published.snapshots_to_go
    return Receipt.model_construct(
        sequence=record.sequence,
        first_snapshot=record.first_snapshot,
        n_snapshots=record.n_snapshots,
        duplicate=duplicate,
        complete=record.complete,
        applied_through=published.applied_through,
        verdict=published.verdict,
        advice=published.advice,
        snapshots_to_go=None if to_go is None else ReceiptForecast.model_validate(to_go),
    )


def first_report(run: RunRecord) -> Convergence:
    """What can be said before the first block is full."""
    length = run.declaration.length_of_block
    text = f"{run.next_snapshot} snapshots are stored; the first result needs {length}"
    return Convergence(
        n_snapshots=0,
        waiting_snapshots=run.next_snapshot,
        time_span=0.0,
        startup_snapshots=0,
        integral_time=None,
        effective_samples=None,
        n_blocks=0,
        block_span=length,
        total_energy=0.0,
        captured_energy_fraction=0.0,
        modes=[],
        groups=[],
        stationarity=Stationarity(
            startup_snapshots=0,
            startup_in_doubt=False,
            drift_p_value=None,
            drifting=False,
            repeated_snapshots=0,
        ),
        verdict=Verdict(state=State.GATHERING, reasons=[Reason(code="no-block-yet", text=text)]),
    )
