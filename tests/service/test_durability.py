"""A failed sync poisons and is never retried; full disks refuse; limits and tokens hold over HTTP."""

from __future__ import annotations

import errno
import hashlib
import os
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from service.commit import Offer, commit_batch
from service.durable import DirectoryInUseError, DirectoryLock, Poison, check_free_space
from service.folders import Folders, RunFolder
from service.journal import Draft
from service.problems import Problem
from service.reading import Reader
from service.registry import Registry, RegistryError
from service.shapes import expect_batch
from streaming.declaration import RunDeclaration
from tests.service.serving import RunningService, check_problem, declaration, npy, snapshots

pytestmark = pytest.mark.timeout(60)  # a hang is a failure, and shows its stacks

BODY = npy(snapshots(0, 3))


class Parts:
    """Registry and journal of one run, without a server."""

    def __init__(self, root: Path) -> None:
        folders = Folders(root)
        folders.create()
        self.poison = Poison()
        self.registry = Registry(folders.registry, self.poison)
        self.reader = Reader(folders.registry)
        self.folder: RunFolder = folders.run("r")
        self.folder.create(self.poison)
        self.declared = RunDeclaration.model_validate(declaration())
        self.registry.add_run("r", self.declared.model_dump_json(), 10)

    def draft(self, body: bytes = BODY) -> Draft:
        draft = Draft(self.folder.journal, len(body), expect_batch(self.declared, 100), self.poison)
        draft.write(body)
        return draft

    def commit(self, draft: Draft, sequence: int) -> tuple[object, bool]:
        header, digest = draft.digest()
        offer = Offer("r", sequence, None, digest, header.shape[0], draft.received_bytes, None)
        return commit_batch(self.registry, self.folder, draft, offer, max_waiting=2)

    @property
    def files(self) -> list[str]:
        return sorted(path.name for path in self.folder.journal.iterdir())


@pytest.fixture
def parts(tmp_path: Path) -> Iterator[Parts]:
    parts = Parts(tmp_path)
    yield parts
    parts.reader.close()
    parts.registry.close()


class FailingSync:
    """os.fsync that fails once, as the kernel does: the second call on the same file would succeed."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch, fail_at: int) -> None:
        self.calls, self.fail_at, self._real = 0, fail_at, os.fsync
        monkeypatch.setattr(os, "fsync", self)

    def __call__(self, descriptor: int) -> None:
        self.calls += 1
        if self.calls == self.fail_at:
            raise OSError(errno.EIO, "input/output error")
        self._real(descriptor)


def test_a_failed_sync_of_the_body_poisons(parts: Parts, monkeypatch: pytest.MonkeyPatch) -> None:
    sync = FailingSync(monkeypatch, 1)
    draft = parts.draft()
    with pytest.raises(Problem) as refused:
        draft.sync()
    draft.discard()
    assert refused.value.kind == "not-durable"
    assert sync.calls == 1
    with pytest.raises(Problem):
        parts.registry.set_status("r", "closed")
    assert parts.files == []


def test_a_failed_sync_of_the_directory_acknowledges_nothing(parts: Parts, monkeypatch: pytest.MonkeyPatch) -> None:
    draft = parts.draft()
    draft.sync()
    FailingSync(monkeypatch, 1)
    with pytest.raises(Problem) as refused:
        parts.commit(draft, 0)
    draft.discard()
    assert refused.value.kind == "not-durable"
    assert parts.reader.batch("r", 0) is None
    with pytest.raises(Problem):
        parts.poison.check()


def test_a_batch_is_whole_before_it_is_named(parts: Parts) -> None:
    draft = parts.draft()
    assert parts.files == [draft.path.name]
    draft.sync()
    record, repeat = parts.commit(draft, 0)
    assert not repeat
    assert record == parts.reader.batch("r", 0)
    assert parts.files == ["000000000000000.npy"]
    assert (parts.folder.batch(0)).read_bytes() == BODY


def test_a_full_disk_before_the_name_stores_nothing(parts: Parts, monkeypatch: pytest.MonkeyPatch) -> None:
    draft = parts.draft()
    draft.sync()

    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, "no space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(Problem) as refused:
        parts.commit(draft, 0)
    draft.discard()
    monkeypatch.undo()
    assert refused.value.kind == "disk-full"
    assert parts.files == []
    assert parts.reader.batch("r", 0) is None
    again = parts.draft()  # and it goes on as soon as there is room
    again.sync()
    parts.commit(again, 0)
    assert parts.reader.batch("r", 0) is not None


def pour(draft: Draft, body: bytes, size: int) -> None:
    for start in range(0, len(body), size):
        draft.write(body[start : start + size])


def test_pieces_of_any_size_are_checked_alike(parts: Parts) -> None:
    bad = snapshots(0, 3)
    bad[2, 1, 5] = np.nan
    for size in (1, 3, 50, 1000):
        whole = Draft(parts.folder.journal, len(BODY), expect_batch(parts.declared, 100), parts.poison)
        pour(whole, BODY, size)
        assert whole.digest()[1] == hashlib.sha256(BODY).digest()
        spoiled = Draft(parts.folder.journal, len(BODY), expect_batch(parts.declared, 100), parts.poison)
        with pytest.raises(Problem) as refused:
            pour(spoiled, npy(bad), size)
        assert refused.value.members == {"snapshot": 2, "field": "q", "point": 5}
        for draft in (whole, spoiled):
            draft.discard()


def test_free_space_is_kept(tmp_path: Path) -> None:
    check_free_space(tmp_path, 0, 0)
    with pytest.raises(Problem) as refused:
        check_free_space(tmp_path, 10, 2**62)
    assert (refused.value.kind, refused.value.status) == ("disk-full", 507)


def test_one_service_holds_a_directory(tmp_path: Path) -> None:
    lock = DirectoryLock(tmp_path)
    with pytest.raises(DirectoryInUseError, match=str(os.getpid())):
        DirectoryLock(tmp_path)
    lock.release()
    DirectoryLock(tmp_path).release()


def test_a_foreign_registry_is_refused(tmp_path: Path) -> None:
    file = tmp_path / "registry.sqlite"
    file.write_bytes(b"no database" * 100)
    with pytest.raises(RegistryError, match=r"registry\.sqlite"):
        Registry(file, Poison())


TOKEN = "a token of sixteen or more"


@pytest.fixture(scope="module")
def guarded(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningService]:
    """A service with a token and small limits."""
    environment = {
        "SLACKWATER_TOKEN": TOKEN,
        "SLACKWATER_MAX_WAITING_BATCHES": "2",
        "SLACKWATER_MAX_RUNS": "3",
        "SLACKWATER_MAX_JOURNAL_BYTES": "1024",
    }
    with RunningService(tmp_path_factory.mktemp("guarded") / "data", environment=environment) as service:
        service.client.headers["Authorization"] = f"Bearer {TOKEN}"
        yield service
        assert "Traceback" not in service.log, service.log


def test_the_token_is_asked_for(guarded: RunningService) -> None:
    for given in ("", "Bearer", "Bearer wrong", f"Basic {TOKEN}"):
        answer = guarded.client.get("/v1/runs", headers={"Authorization": given})
        check_problem(answer, 401, "token-needed")
        assert answer.headers["www-authenticate"] == "Bearer"
    assert guarded.client.get("/livez", headers={"Authorization": ""}).status_code == 200
    assert guarded.client.get("/v1/runs").status_code == 200


def test_what_waits_is_bounded_and_the_missing_batch_gets_in(guarded: RunningService) -> None:
    """Bounds: two batches ahead of a gap; and the journal, which holds four blocks at least."""
    run = guarded.declare()
    for sequence in (1, 2):
        assert guarded.put(run, sequence, snapshots(0, 20)).status_code == 201
    check_problem(guarded.put(run, 3, snapshots(0, 20)), 429, "busy")
    check_problem(guarded.put(run, 3, snapshots(0, 40)), 429, "busy")
    assert guarded.put(run, 0, snapshots(0, 60)).status_code == 201
    assert guarded.applied(run, 96)["n_applied"] == 96


def test_a_full_journal_empties_itself(guarded: RunningService) -> None:
    """Posted as fast as they go, with what a client does at 429: all are applied, and little stays on disk."""
    run = guarded.declare()
    sequence, refused = 0, 0
    while sequence < 14:
        answer = guarded.put(run, sequence, snapshots(sequence * 12, (sequence + 1) * 12))
        if answer.status_code == 429:
            refused += 1
            assert refused < 500
            guarded.applied(run, 12 * max(sequence - 3, 0))
            continue
        assert answer.status_code == 201, answer.text
        sequence += 1
    guarded.applied(run, 168)
    assert guarded.client.get(f"/v1/runs/{run}").json()["journal_bytes"] < 6 * 12 * 96 * 8


def test_the_number_of_runs_is_bounded(guarded: RunningService) -> None:
    while (answer := guarded.client.post("/v1/runs", json=declaration())).status_code == 201:
        assert len(guarded.client.get("/v1/runs").json()["runs"]) <= 3
    assert answer.json()["type"] == "/problems/too-many-runs"
    assert len(list((guarded.data / "runs").iterdir())) == 3
