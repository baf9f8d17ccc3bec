"""Trouble with the disk beside the data themselves: a folder that cannot be made, a draft that cannot be removed."""

from __future__ import annotations

import errno
import shutil
from pathlib import Path

import pytest

from service.durable import Poison
from service.journal import Draft, JournalError, JournalFile
from service.shapes import expect_batch
from streaming.declaration import RunDeclaration
from streaming.errors import CheckpointError
from streaming.files import check_manifest
from tests.service.serving import RunningService, check_problem, declaration, npy, snapshots

pytestmark = pytest.mark.timeout(60)


def test_a_run_without_its_folder_is_refused_and_gets_it_with_its_first_batch(tmp_path: Path) -> None:
    with RunningService(tmp_path / "data") as service:
        runs, aside = service.data / "runs", service.data / "aside"
        runs.rename(aside)
        runs.write_bytes(b"no folder can be made in a file")
        key = {"Idempotency-Key": "the same"}
        refused = check_problem(service.client.post("/v1/runs", json=declaration(), headers=key), 503, "stopping")
        assert "Idempotency-Key" in refused["detail"]
        runs.unlink()
        aside.rename(runs)
        run = service.client.get("/v1/runs").json()["runs"][0]["id"]
        assert service.put(run, 0, snapshots(0, 5)).status_code == 201
        assert service.client.post("/v1/runs", json=declaration(), headers=key).json()["id"] == run
        assert "Traceback" not in service.log


def test_a_draft_that_cannot_be_removed_spoils_no_receipt(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    body = npy(snapshots(0, 3))

    def broken(*_: object, **__: object) -> None:
        raise OSError(errno.EIO, "input/output error")

    for kept in (True, False):
        expected = expect_batch(RunDeclaration.model_validate(declaration()), 100)
        draft = Draft(tmp_path, len(body), expected, Poison())
        draft.write(body)
        if kept:
            draft.keep(tmp_path / "kept.npy")
        with monkeypatch.context() as patched:
            patched.setattr(Path, "unlink", broken)
            draft.discard()
        assert draft.path.exists() is not kept


def test_a_folder_removed_by_hand_is_made_again(service: RunningService) -> None:
    run = service.declare()
    shutil.rmtree(service.data / "runs" / run)
    assert service.put(run, 0, snapshots(0, 5)).status_code == 201


def test_want_of_handles_is_no_damage(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Neither a checkpoint nor a batch is given up because it could not be opened just then."""

    def none_free(*_: object, **__: object) -> None:
        raise OSError(errno.EMFILE, "too many open files")

    with monkeypatch.context() as patched:
        patched.setattr(Path, "open", none_free)
        patched.setattr(Path, "read_text", none_free)
        for attempt in (lambda: check_manifest(tmp_path), lambda: JournalFile(tmp_path / "none.npy", 10, b"")):
            with pytest.raises(OSError, match="too many open files"):
                attempt()
    with pytest.raises(CheckpointError):
        check_manifest(tmp_path)
    with pytest.raises(JournalError):
        JournalFile(tmp_path / "none.npy", 10, b"")
