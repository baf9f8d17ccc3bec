"""One short run as a client posts it, its journal of what was answered, and what must hold whatever happened.

The oracle: whatever was acknowledged is stored, byte for byte, and counts once; what was refused or not answered may
be in or out, and sending it again converges; the basis, the mean and the singular values are those of the run that
nothing disturbed, bit for bit; no file is left over; and the service answers again.
"""

from __future__ import annotations

import hashlib
import io
import json
import sqlite3
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cache
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np

from streaming import SnapshotStream
from tests.faults.forked import Answer, Forked, Gone
from tests.service.serving import declaration, npy, snapshots

BATCHES = (9, 7, 8, 9, 3)  # 36 snapshots: three blocks of twelve, each cut by the batches
N_SNAPSHOTS = sum(BATCHES)
KEY = "one run, whatever happens"
WEIGHTS = np.linspace(0.5, 1.5, 48)
NPY = {"content_type": "application/x-npy"}


@dataclass(frozen=True)
class Operation:
    """One request of the scenario, under a name for the journal."""

    name: str
    method: str
    path: str
    body: bytes
    headers: dict[str, str]


@cache
def bodies() -> tuple[bytes, ...]:
    edges = np.cumsum((0, *BATCHES))
    return tuple(npy(snapshots(int(a), int(b))) for a, b in pairwise(edges))


@cache
def run_id() -> str:
    """The key makes the same name in every data directory."""
    return f"roof-panel-{hashlib.sha256(KEY.encode()).hexdigest()[:16]}"


def operations(waiting: bool) -> Iterator[Operation]:
    """The scenario; ``waiting`` for each batch to be applied, or posting on while the worker works."""
    head = {"content_type": "application/json", "idempotency_key": KEY}
    yield Operation("declare", "POST", "/v1/runs", json.dumps(declaration()).encode(), head)
    base = f"/v1/runs/{run_id()}"
    yield Operation("weights", "PUT", f"{base}/weights", npy(WEIGHTS), NPY)
    for sequence, body in enumerate(bodies()):
        prefer = {"prefer": "wait=1"} if waiting else {}
        yield Operation(f"batch {sequence}", "PUT", f"{base}/batches/{sequence}", body, NPY | prefer)
    yield Operation("close", "POST", f"{base}/close", b"", {"prefer": "wait=1"})


@dataclass
class Journal:
    """What the client knows: each operation is ok, failed (refused) or unknown (no answer)."""

    outcomes: dict[str, str] = field(default_factory=dict)
    statuses: Counter[int] = field(default_factory=Counter)

    def note(self, name: str, outcome: str) -> None:
        if self.outcomes.get(name) != "ok":  # once acknowledged, for ever
            self.outcomes[name] = outcome

    @property
    def acknowledged(self) -> list[int]:
        """Numbers of the batches that have a receipt."""
        names = (name for name, outcome in self.outcomes.items() if outcome == "ok" and name.startswith("batch"))
        return sorted(int(name.split()[1]) for name in names)


def play(service: Forked, journal: Journal, waiting: bool) -> None:
    """Send what the scenario holds, each at most twice, as a careful client does: nothing before the weights are in,
    and no close while a batch is missing."""
    for operation in operations(waiting):
        if operation.name == "close" and len(journal.acknowledged) < len(BATCHES):
            return
        for _ in range(2):
            answer = send(service, journal, operation)
            if journal.outcomes[operation.name] == "ok":
                break
            if answer is None and service.ended(0.5):
                return
        if operation.name in ("declare", "weights") and journal.outcomes[operation.name] != "ok":
            return


def send(service: Forked, journal: Journal, operation: Operation) -> Answer | None:
    try:
        answer = service.ask(operation.method, operation.path, operation.body, **operation.headers)
    except Gone:
        journal.note(operation.name, "unknown")
        return None
    journal.statuses[answer.status] += 1
    journal.note(operation.name, "ok" if answer.status in (200, 201, 202, 204) else "failed")
    check_refusal(answer)
    return answer


def check_refusal(answer: Answer) -> None:
    """What is refused is a problem document, and what may be tried again says when."""
    if answer.status < 400:
        return
    assert answer.headers["content-type"] == "application/problem+json", answer
    assert answer.status != 500, answer.body
    if answer.status in (429, 503, 507):
        assert int(answer.headers["retry-after"]) > 0


def check_kept(data: Path, journal: Journal) -> dict[int, bytes]:
    """Whatever was acknowledged is there; return the digests of the stored batches."""
    if journal.outcomes.get("weights") == "ok":
        assert (data / "runs" / run_id() / "weights.npy").read_bytes() == npy(WEIGHTS)
    known = stored_digests(data)
    for sequence in journal.acknowledged:
        assert known.get(sequence) == hashlib.sha256(bodies()[sequence]).digest(), f"batch {sequence} was lost"
    return known


def finish(service: Forked, journal: Journal) -> None:
    """Send again all there is, as a client that came back does; now everything must be taken."""
    known = check_kept(service.data, journal)
    for operation in operations(waiting=False):
        if operation.name == "weights" and known:
            continue  # the run has begun, so they are in place
        headers = operation.headers | ({"prefer": "wait=20"} if operation.name == "close" else {})
        answer = service.ask(operation.method, operation.path, operation.body, **headers)
        assert answer.status in (200, 201, 204), (operation.name, answer)
        if operation.name.startswith("batch"):
            repeated = int(operation.name.split()[1]) in known
            assert answer.json()["duplicate"] is repeated, f"{operation.name}: {answer.body!r}"
        journal.note(operation.name, "ok")


def stored_digests(data: Path) -> dict[int, bytes]:
    rows = query(data, "SELECT sequence, digest FROM batches ORDER BY sequence")
    return {int(sequence): bytes(digest) for sequence, digest in rows}


def query(data: Path, text: str) -> list[tuple[Any, ...]]:
    registry = sqlite3.connect(f"file:{data / 'registry.sqlite'}?mode=ro", uri=True)
    try:
        return registry.execute(text).fetchall()
    finally:
        registry.close()


@cache
def undisturbed() -> SnapshotStream:
    """The same batches in one process that nothing disturbs."""
    stream = SnapshotStream(declaration(), weights=WEIGHTS)
    stream.absorb(snapshots(0, N_SNAPSHOTS))
    stream.close()
    return stream


def check_result(service: Forked) -> None:
    """Closed, each snapshot counted once, and the bits are those of the undisturbed run."""
    base = f"/v1/runs/{run_id()}"
    run = service.ask("GET", base).json()
    assert run["status"] == "closed", run
    assert (run["n_applied"], run["next_sequence"]) == (N_SNAPSHOTS, len(BATCHES)), run
    expected = undisturbed()
    for name, wanted in (
        ("modes", expected.modes()),
        ("mean", expected.mean()),
        ("singular-values", expected.singular_values()),
    ):
        answer = service.ask("GET", f"{base}/{name}", accept="application/x-npy")
        assert answer.status == 200, answer
        got = np.load(io.BytesIO(answer.body), allow_pickle=False)
        np.testing.assert_array_equal(got, wanted[: len(got)], err_msg=name)


def check_registry(data: Path) -> None:
    """Sound, each fact once, numbered without a hole."""
    assert query(data, "PRAGMA integrity_check") == [("ok",)]
    starts = [int(n) for n in np.cumsum((0, *BATCHES[:-1]))]
    rows = query(data, "SELECT sequence, first_snapshot, n_snapshots, pruned FROM batches ORDER BY sequence")
    assert rows == [(k, starts[k], n, 1) for k, n in enumerate(BATCHES)]
    kinds = Counter(kind for (kind,) in query(data, "SELECT kind FROM events"))
    assert (kinds["declared"], kinds["closing"], kinds["closed"], kinds["failed"]) == (1, 1, 1, 0), kinds
    assert kinds["checkpoint-damaged"] == 0, kinds


def tree(data: Path) -> list[str]:
    """Every file and folder there is."""
    return sorted(str(path.relative_to(data)) for path in data.rglob("*"))
