"""Parts in any order, repeated, conflicting, late, after restarts: always as a plain model of them says."""

from __future__ import annotations

import shutil
import tempfile
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, rule

from service.commit import Offer, commit_batch
from service.durable import Poison
from service.folders import Folders
from service.journal import Draft, JournalBatch, sweep
from service.problems import Problem
from service.reading import Reader
from service.registry import Registry
from service.shapes import expect_part
from streaming.declaration import RunDeclaration
from tests.service.serving import declaration, npy

pytestmark = pytest.mark.timeout(120)  # a hang is a failure, and shows its stacks

BOUNDS = [0, 1, 20, 48]
N_PARTS = len(BOUNDS) - 1
N_SEQUENCES = 6
MAX_WAITING = 3
DECLARED = RunDeclaration.model_validate(
    declaration(parts=[{"start": start, "stop": stop} for start, stop in pairwise(BOUNDS)])
)


def values(part: int, sequence: int, n: int, variant: int) -> np.ndarray:
    """What a part sends; another variant is another flow."""
    rng = np.random.default_rng((part, sequence, variant))
    return rng.standard_normal((n, 2, BOUNDS[part + 1] - BOUNDS[part])).astype(np.float32)


class PartsMachine(RuleBasedStateMachine):
    """The registry and the journal of one run beside a dictionary of what each part has sent."""

    @initialize()
    def open(self) -> None:
        self.root = Path(tempfile.mkdtemp())
        self.sent: dict[tuple[int, int], tuple[int, int]] = {}  # (sequence, part): snapshots, variant
        self._open()
        self.registry.add_run("r", DECLARED.model_dump_json(), 1)
        self.folder.create(self.poison)

    def _open(self) -> None:
        folders = Folders(self.root)
        folders.create()
        self.poison = Poison()
        self.registry = Registry(folders.registry, self.poison)
        self.reader = Reader(folders.registry)
        self.folder = folders.run("r")

    def teardown(self) -> None:
        if hasattr(self, "root"):
            self._close()
            shutil.rmtree(self.root)

    def _close(self) -> None:
        self.reader.close()
        self.registry.close()

    # -- the model ----------------------------------------------------------------------------------------

    def complete(self, sequence: int) -> bool:
        return all((sequence, part) in self.sent for part in range(N_PARTS))

    @property
    def next_sequence(self) -> int:
        return next(k for k in range(N_SEQUENCES + 1) if not self.complete(k))

    def expected(self, part: int, sequence: int, n: int, variant: int) -> str:
        """``stored``, ``repeat``, or the kind of problem."""
        known = self.sent.get((sequence, part))
        if known is not None:
            return "repeat" if known == (n, variant) else "sequence-conflict"
        begun = {k: count for (k, _), (count, _) in self.sent.items()}
        if sequence in begun:
            return "stored" if begun[sequence] == n else "parts-disagree"
        ahead = {k for k in begun if k > self.next_sequence}
        return "busy" if sequence > self.next_sequence and len(ahead) >= MAX_WAITING else "stored"

    # -- what happens -------------------------------------------------------------------------------------

    @rule(
        part=st.integers(0, N_PARTS - 1),
        sequence=st.integers(0, N_SEQUENCES - 1),
        n=st.sampled_from([2, 2, 2, 3]),
        variant=st.sampled_from([0, 0, 0, 1]),
    )
    def send(self, part: int, sequence: int, n: int, variant: int) -> None:
        expected = self.expected(part, sequence, n, variant)
        assert self._send(part, sequence, n, variant) == expected
        if expected == "stored":
            self.sent[sequence, part] = (n, variant)

    @rule(part=st.integers(0, N_PARTS - 1), back=st.integers(0, 2))
    def start_rank_again(self, part: int, back: int) -> None:
        """It sends from a little before where it stands, as those before it cut their batches."""
        record = self.reader.part("r", part)
        assert record is not None
        for sequence in range(max(0, record.next_sequence - back), min(record.next_sequence + 1, N_SEQUENCES)):
            n, variant = self.sent.get((sequence, part), (2, 0))
            self.send(part, sequence, n, variant)

    @rule()
    def start_service_again(self) -> None:
        """After a crash that left a draft and a file without a row."""
        (self.folder.journal / "0123.part").write_bytes(b"torn")
        self.folder.batch(N_SEQUENCES, 0).write_bytes(b"never acknowledged")
        self._close()
        self._open()
        sweep(self.folder, {self.folder.batch(*kept).name for kept in self.reader.kept_batches("r")})

    def _send(self, part: int, sequence: int, n: int, variant: int) -> str:
        assert DECLARED.parts is not None
        body = npy(values(part, sequence, n, variant))
        draft = Draft(self.folder.journal, len(body), expect_part(DECLARED, DECLARED.parts[part], 100), self.poison)
        try:
            draft.write(body)
            _, digest = draft.digest()
            draft.sync()
            offer = Offer("r", sequence, None, digest, n, len(body), None, part)
            record, duplicate = commit_batch(self.registry, self.folder, draft, offer, MAX_WAITING)
        except Problem as problem:
            return problem.kind
        finally:
            draft.discard()
        others = set(self.sent) | {(sequence, part)}
        assert record.complete == all((sequence, other) in others for other in range(N_PARTS))
        return "repeat" if duplicate else "stored"

    # -- what always holds --------------------------------------------------------------------------------

    @invariant()
    def the_run_is_as_the_model(self) -> None:
        run = self.reader.run("r")
        assert run.next_sequence == self.next_sequence
        assert run.next_snapshot == sum(self.sent[k, 0][0] for k in range(self.next_sequence))
        waiting = {sequence for sequence, _ in self.sent if sequence >= self.next_sequence}
        assert self.reader.backlog("r").n_waiting == len(waiting)
        assert (self.reader.waiting_since("r") is not None) == bool(waiting)

    @invariant()
    def each_part_is_as_the_model(self) -> None:
        for part in range(N_PARTS):
            record = self.reader.part("r", part)
            assert record is not None
            own = {sequence for sequence, sender in self.sent if sender == part}
            assert record.n_stored == len(own)
            assert record.next_sequence == next(k for k in range(N_SEQUENCES + 1) if k not in own)

    @invariant()
    def the_journal_holds_what_was_sent_and_no_more(self) -> None:
        files = {path.name for path in self.folder.journal.iterdir()}
        assert files == {self.folder.batch(*key).name for key in self.sent}

    @invariant()
    def complete_batches_read_back_whole(self) -> None:
        snapshot = 0
        for sequence in range(self.next_sequence):
            record = self.reader.batch_holding("r", snapshot)
            assert record is not None
            assert (record.sequence, record.first_snapshot) == (sequence, snapshot)
            batch = JournalBatch(self.folder, record, self.reader.part_batches("r", sequence))
            batch.verify()
            sent = [values(part, sequence, *self.sent[sequence, part]) for part in range(N_PARTS)]
            whole = np.concatenate(sent, axis=2).reshape(record.n_snapshots, -1)
            np.testing.assert_array_equal(batch.snapshots(0, record.n_snapshots, DECLARED), whole)
            np.testing.assert_array_equal(batch.snapshots(1, 2, DECLARED), whole[1:2])
            snapshot += record.n_snapshots


PartsMachine.TestCase.settings = settings(
    max_examples=12,
    stateful_step_count=25,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow],
)
TestParts = PartsMachine.TestCase
