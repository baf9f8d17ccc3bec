"""``slackwater watch-folder``: half-written files, bad files, kills and restarts; each snapshot once."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from service.feeding.choice import Choice
from service.feeding.folder import Seen, Sighting, in_order, natural, seen_again
from service.feeding.posted_list import NAME, Entry, PostedList
from service.feeding.variables import FeedError
from service.feeding.watching import Manner, Watcher
from slackwater_client import Client, Run
from tests.clients.conftest import Service

Values = npt.NDArray[Any]
Make = Callable[..., npt.NDArray[np.float32]]
SETTLE = 0.15


def write(path: Path, snapshots: Values, times: Values | None = None) -> None:
    """A whole file in one step, as a rig with manners does."""
    partial = path.with_name(f"{path.name}.part")
    with partial.open("wb") as file:
        np.savez(file, u=snapshots[:, 0], v=snapshots[:, 1], **({} if times is None else {"t": times}))
    partial.rename(path)


def write_slowly(path: Path, snapshots: Values, times: Values, pause: float) -> None:
    """Half of the file, a pause, and the rest, under the final name."""
    whole = path.with_name(".hidden.npz")
    write(whole, snapshots, times)
    raw = whole.read_bytes()
    whole.unlink()
    with path.open("wb") as file:
        file.write(raw[: len(raw) // 2])
        file.flush()
        time.sleep(pause)
        file.write(raw[len(raw) // 2 :])


class Watch:
    """The command in a process of its own, which can be killed and started again."""

    def __init__(self, folder: Path, service: Service, *options: str) -> None:
        self._command = [sys.executable, "-m", "service", "watch-folder", str(folder), "--url", service.url]
        self._command += ["--settle", str(SETTLE), "--poll", "0.05", *options]
        self._log = folder.with_suffix(".log")
        self._process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        clean = {name: value for name, value in os.environ.items() if not name.startswith("SLACKWATER_")}
        with self._log.open("ab") as log:
            self._process = subprocess.Popen(self._command, stdout=log, stderr=log, env=clean)

    @property
    def log(self) -> str:
        return self._log.read_text()

    @property
    def running(self) -> bool:
        return self._process is not None and self._process.poll() is None

    def end(self, number: signal.Signals = signal.SIGKILL) -> int:
        assert self._process is not None
        if self._process.poll() is None:
            self._process.send_signal(number)
        return self._process.wait(10.0)

    def wait(self, seconds: float) -> int:
        assert self._process is not None
        return self._process.wait(seconds)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "rig").mkdir()
    return tmp_path / "rig"


@pytest.fixture
def watch(folder: Path, service: Service) -> Iterator[Callable[..., Watch]]:
    """Start watches; those that still run are ended with the test, by their ids."""
    started: list[Watch] = []

    def start(*options: str) -> Watch:
        one = Watch(folder, service, *options)
        started.append(one)
        one.start()
        return one

    yield start
    for one in started:
        one.end()


def until(reached: Callable[[], bool], seconds: float = 20.0) -> None:
    deadline = time.monotonic() + seconds
    while not reached():
        assert time.monotonic() < deadline, "not reached in time"
        time.sleep(0.02)


def names(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir() if not path.name.startswith(".")) if folder.exists() else []


def rig_and_kills(
    n_files: int, folder: Path, watch: Callable[..., Watch], client: Client, declaration: dict[str, Any], make: Make
) -> None:
    """A rig drops files, some by halves and some of them bad, while the watch is killed and started again."""
    run = client.declare({**declaration, "dtype": "float32"})
    options = ("--run", run.id, "--give-up", "1.5", "--end-after-idle", "4")
    rng = np.random.default_rng(12)
    kills = set(rng.choice(np.arange(n_files // 10, n_files), 2 + n_files // 100, replace=False))
    bad = {n_files // 5: "nan", n_files // 3: "shape", n_files // 2: "garbage"}
    slow = set(rng.choice(n_files, 6, replace=False)) - set(bad)
    snapshots, times = make(2 * n_files), 0.5 * np.arange(2 * n_files)
    kept = np.ones(2 * n_files, bool)
    current = watch(*options)
    until(lambda: NAME in os.listdir(folder))
    for k in range(n_files):
        own = slice(2 * k, 2 * k + 2)
        part, path = snapshots[own].copy(), folder / f"burst{k}.npz"  # numbers without leading zeros
        kept[own] = k not in bad
        if bad.get(k) == "nan":
            part[1, 1, 7] = np.nan
        if bad.get(k) == "garbage":
            path.write_bytes(b"disk was full when this was written")
        elif k in slow:
            write_slowly(path, part, times[own], pause=float(rng.uniform(0.05, 0.6)))
        else:
            write(path, part[:, :, :50] if bad.get(k) == "shape" else part, times[own])
        if k in kills:
            current.end()
            current = watch(*options)
        time.sleep(float(rng.uniform(0.0, 0.01)))
    assert current.wait(120.0) == 0, current.log
    assert names(folder) == ["done", "refused"]
    assert len(names(folder / "done")) == n_files - len(bad)
    assert names(folder / "refused") == sorted(f"burst{k}.npz{end}" for k in bad for end in ("", ".txt")), current.log
    assert "NaN" in (folder / "refused" / f"burst{n_files // 5}.npz.txt").read_text()
    assert "shape" in (folder / "refused" / f"burst{n_files // 3}.npz.txt").read_text()
    assert run.status == "closed"
    got, coefficients = run.coefficients()
    np.testing.assert_array_equal(got, times[kept])
    direct = client.declare({**declaration, "dtype": "float32"})
    for sequence, start in enumerate(range(0, 2 * n_files, 500)):
        part = np.flatnonzero(kept)[start : start + 500]
        if len(part):
            direct.post(snapshots[part], sequence, times[part])
    direct.close()
    np.testing.assert_array_equal(coefficients, direct.coefficients()[1])
    np.testing.assert_array_equal(run.mean(), direct.mean())


@pytest.mark.timeout(150)
def test_each_snapshot_once_whatever_happens_in_between(
    folder: Path, watch: Callable[..., Watch], client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    rig_and_kills(200, folder, watch, client, declaration, make_snapshots)


@pytest.mark.campaign
@pytest.mark.timeout(300)
def test_a_thousand_files(
    folder: Path, watch: Callable[..., Watch], client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    rig_and_kills(1000, folder, watch, client, declaration, make_snapshots)


# -- in process: every place where a kill can fall ---------------------------------------------------------------


class Killed(BaseException):
    """Stands for kill -9: nothing of the watcher runs after it."""


def watcher(folder: Path, run: Run, client: Client, **manner: Any) -> Watcher:
    told: list[str] = []
    settings = {"settle_seconds": 0.0, "give_up_seconds": 0.0, **manner}
    one = Watcher(folder, Choice(), Manner(**settings), lambda _: run, told.append)
    one.resume(client.run)
    return one


@pytest.mark.parametrize(
    ("place", "after", "mark"),
    [
        ("list.add", False, False),
        ("list.add", True, False),
        ("run.post", False, False),
        ("run.post", True, False),
        ("_put_away", False, False),
        ("_put_away", True, False),
        ("run.post", True, True),
        ("_put_away", False, True),
    ],
)
def test_killed_before_and_after_every_step(
    place: str,
    after: bool,
    mark: bool,
    folder: Path,
    client: Client,
    declaration: dict[str, Any],
    make_snapshots: Make,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    run = client.declare(declaration)
    snapshots, times = make_snapshots(60), 0.5 * np.arange(60)
    for k in range(3):
        write(folder / f"b{k}.npz", snapshots[20 * k : 20 * k + 20], times[20 * k : 20 * k + 20])
    small = {"mark": mark, "max_batch_bytes": 9 * 120 * 4}  # three batches for each file
    calls = 0
    for _ in range(4):
        current = watcher(folder, run, client, **small)
        owner: Any = current
        if place.startswith("run."):
            current.run = owner = client.run(run.id)
            current.list.bind(run.id)
        elif place.startswith("list."):
            owner = current.list
        method = place.split(".")[-1]
        plain = getattr(owner, method)

        def dying(*arguments: Any, plain: Any = plain, **options: Any) -> Any:
            nonlocal calls
            calls += 1
            if calls % 2 == 0 and not after:
                raise Killed
            result = plain(*arguments, **options)
            if calls % 2 == 0:
                raise Killed
            return result

        monkeypatch.setattr(owner, method, dying)
        try:
            current.poll()
        except Killed:
            pass
        finally:
            current.list.close()
    last = watcher(folder, run, client, **small)
    last.poll()
    last.list.close()
    assert calls >= 2
    run.close()
    got, coefficients = run.coefficients()
    np.testing.assert_array_equal(got, times)
    direct = client.declare(declaration)
    direct.post(snapshots, 0, times)
    direct.close()
    np.testing.assert_array_equal(coefficients, direct.coefficients()[1])
    if mark:
        assert names(folder) == sorted(f"b{k}.npz{end}" for k in range(3) for end in ("", ".posted"))
    else:
        assert names(folder) == ["done"]
        assert names(folder / "done") == ["b0.npz", "b1.npz", "b2.npz"]


def test_a_name_that_is_used_again_is_another_file(
    folder: Path, client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    run = client.declare(declaration)
    one = watcher(folder, run, client)
    for k in range(3):
        write(folder / "latest.npz", make_snapshots(5, seed=k))
        os.utime(folder / "latest.npz", ns=(1, 1))  # a file system with coarse times
        one.poll()
    one.list.close()
    assert run.refresh()["n_snapshots"] == 15
    assert names(folder / "done") == ["latest-2.npz", "latest-3.npz", "latest.npz"]


def test_a_folder_is_watched_by_one_process_and_for_one_run(
    folder: Path, client: Client, declaration: dict[str, Any], make_snapshots: Make, watch: Callable[..., Watch]
) -> None:
    run, other = client.declare(declaration), client.declare(declaration)
    one = watcher(folder, run, client)
    write(folder / "a.npz", make_snapshots(5))
    one.poll()
    with pytest.raises(FeedError, match="watched by another process"):
        PostedList(folder)
    one.list.close()
    refused = watch("--run", other.id)
    assert refused.wait(20.0) == 1
    assert f"belongs to run {run.id}" in refused.log


def test_a_run_is_declared_from_the_first_file(
    folder: Path, client: Client, make_snapshots: Make, watch: Callable[..., Watch], tmp_path: Path
) -> None:
    (tmp_path / "point.json").write_text(json.dumps({"retained_rank": 8, "time": {"step": 0.5}}))
    options = ("--declaration", str(tmp_path / "point.json"), "--modes", "2", "--name", "roof panel")
    current = watch(*options, "--end-after-idle", "1.5")
    write(folder / "a1.npz", make_snapshots(400))
    assert current.wait(30.0) == 0, current.log
    found = next(run for run in client.runs() if run.name == "roof panel")
    assert [field["name"] for field in found.declaration["fields"]] == ["u", "v"]
    assert found.resource["status"] == "closed"
    assert found.resource["n_snapshots"] == 400
    assert f"{found.id}: settled" in current.log


def test_the_watch_ends_when_settled_and_leaves_the_rest(
    folder: Path, client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    run = client.declare(declaration)
    run.post(make_snapshots(2000), 0)
    run.wait(20.0)
    one = watcher(folder, run, client)
    for k in range(3):
        write(folder / f"b{k}.npz", make_snapshots(5, seed=k))
    one.poll(lambda: one.may_stop)
    one.list.close()
    assert one.may_stop
    assert names(folder) == ["b1.npz", "b2.npz", "done"]


def test_a_run_that_others_post_to_ends_the_watch(
    folder: Path, client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    run = client.declare(declaration)
    one = watcher(folder, run, client)
    write(folder / "a.npz", make_snapshots(5))
    one.poll()
    run.post(make_snapshots(7, seed=1), 1)
    write(folder / "b.npz", make_snapshots(5, seed=2))
    with pytest.raises(ValueError, match="another program posts to the run"):
        one.poll()
    one.list.close()
    assert names(folder) == ["b.npz", "done"]


def test_a_folder_that_is_away_for_a_moment_is_tried_again(
    folder: Path, client: Client, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    one = watcher(folder, client.declare(declaration), client)
    away = folder.rename(folder.with_name("away"))
    one.poll()
    one.poll()
    assert one.idle_seconds == 0.0
    away.rename(folder)
    write(folder / "a.npz", make_snapshots(5))
    one.poll()
    one.list.close()
    assert names(folder) == ["done"]


def test_the_watch_does_not_end_while_a_file_waits(folder: Path, client: Client, declaration: dict[str, Any]) -> None:
    one = watcher(folder, client.declare(declaration), client, give_up_seconds=60.0)
    (folder / "half.npz").write_bytes(b"PK")
    one.poll()
    time.sleep(0.02)
    assert one.idle_seconds == 0.0
    (folder / "half.npz").unlink()
    one.poll()
    time.sleep(0.02)
    assert one.idle_seconds > 0.0
    one.list.close()


def test_a_damaged_list_is_refused_and_a_torn_line_dropped(folder: Path) -> None:
    kept = PostedList(folder)
    kept.bind("some-run")
    kept.add(Entry("a.npy", 10, 20, 0))
    kept.close()
    path = folder / NAME
    path.write_bytes(path.read_bytes() + b'{"name": "b.npy", "n_by')
    again = PostedList(folder)
    assert (again.run_id, again.last()) == ("some-run", Entry("a.npy", 10, 20, 0))
    again.add(Entry("b.npy", 10, 21, 1))
    assert again.is_settled(Sighting("a.npy", 10, 20))
    assert not again.is_settled(Sighting("b.npy", 10, 21))
    again.close()
    lines = path.read_bytes().splitlines()
    path.write_bytes(b"\n".join([lines[0], lines[1][:9], lines[2], b""]))
    with pytest.raises(FeedError, match="is damaged"):
        PostedList(folder)


def test_names_are_ordered_by_the_value_of_their_numbers() -> None:
    files = ["frame10.npy", "frame9.npy", "frame009.npy", "a2b10.npy", "a2b9.npy"]
    assert sorted(files, key=natural) == ["a2b9.npy", "a2b10.npy", "frame009.npy", "frame9.npy", "frame10.npy"]
    seen = [Seen(Sighting("b", 1, 5), 0.0), Seen(Sighting("a", 1, 7), 0.0)]
    assert [one.sighting.name for one in in_order(seen, "time")] == ["b", "a"]
    assert [one.sighting.name for one in in_order(seen, "name")] == ["a", "b"]


def test_a_change_starts_the_settling_time_anew() -> None:
    known = seen_again({}, [Sighting("a", 1, 5), Sighting("b", 1, 5)], now=10.0)
    known = seen_again(known, [Sighting("a", 1, 5), Sighting("b", 2, 6)], now=11.0)
    assert (known["a"].since, known["b"].since) == (10.0, 11.0)
    assert seen_again(known, [], now=12.0) == {}


def test_a_service_that_is_away_for_a_while_loses_and_doubles_nothing(
    folder: Path, mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make
) -> None:
    snapshots, times = make_snapshots(80), 0.5 * np.arange(80)
    with Client(mortal_service.url) as client:
        run = client.declare(declaration)
        current = Watch(folder, mortal_service, "--run", run.id, "--end-after-idle", "3")
        current.start()
        try:
            for k in range(40):
                write(folder / f"b{k}.npz", snapshots[2 * k : 2 * k + 2], times[2 * k : 2 * k + 2])
                if k == 12:
                    until(lambda: run.refresh()["n_snapshots"] > 0)
                    mortal_service.kill()
                if k == 30:
                    mortal_service.start()
                time.sleep(0.03)
            assert current.wait(60.0) == 0, current.log
        finally:
            current.end()
        assert names(folder) == ["done"]
        np.testing.assert_array_equal(run.coefficients()[0], times)
        np.testing.assert_allclose(run.mean().reshape(-1), snapshots.reshape(80, -1).mean(axis=0), rtol=1e-5)
