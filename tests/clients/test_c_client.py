"""The C client against a real service: bytes as posted, nothing lost, nothing doubled, clear refusals.

That the bytes arrived as they left is checked by posting them again from here: the service answers "duplicate" only to
the same bytes and times under the same number.
"""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from slackwater_client import Client, Run
from tests.clients.building import C_CLIENT, C_PROGRAMS, Replay, Replayed, compiled
from tests.clients.conftest import Service
from tests.clients.cutting_proxy import CuttingProxy

Make = Callable[..., npt.NDArray[np.float32]]
Values = npt.NDArray[np.floating[Any]]

# results of slackwater.h
OK, SKIPPED, MISFIT, LOST, STOPPED, REFUSED, NO_ANSWER, UNSENT = 0, 2, 3, 4, 5, 6, 7, 8
NO_RUN = 1


@pytest.fixture(scope="session")
def replay_program(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return compiled(tmp_path_factory.mktemp("c") / "replay", [C_PROGRAMS / "replay.c", C_CLIENT / "slackwater.c"])


class Replays:
    """Runs the replay program on snapshots."""

    def __init__(self, program: Path, directory: Path) -> None:
        self._program, self._directory = program, directory
        self.wrapper: list[str] = []
        self.environment: dict[str, str] = {}

    def start(
        self, url: str, run: str | dict[str, Any], snapshots: Values, n: int | None = None, **settings: float
    ) -> Replay:
        values = self._directory / "values"
        values.write_bytes(snapshots.tobytes())
        if isinstance(run, dict):
            declaration = self._directory / "declaration.json"
            declaration.write_text(json.dumps(run))
            how = ["declare", str(declaration)]
        else:
            how = ["attach", run]
        counts = [n or len(snapshots), *snapshots.shape[1:]]
        wide = {"wide": 1} if snapshots.dtype == np.float64 else {}
        told = [f"{name}={value}" for name, value in {**settings, **wide}.items()]
        command = [*self.wrapper, str(self._program), *how, str(values), *map(str, counts), *told]
        return Replay(command, url, **self.environment)

    def __call__(self, url: str, run: str | dict[str, Any], snapshots: Values, **settings: Any) -> Replayed:
        return self.start(url, run, snapshots, **settings).result()


@pytest.fixture
def replay(replay_program: Path, tmp_path: Path) -> Replays:
    return Replays(replay_program, tmp_path)


def times_of(first: int, last: int) -> Values:
    """Times that the replay program gives to its snapshots."""
    return 0.5 * np.arange(first, last) + 1e-3 / 3.0


def check_stored(run: Run, snapshots: Values, batch: int, timed: bool = True, first: int = 0, sequence: int = 0) -> int:
    """Assert that the service holds these bytes and times under these numbers; gives the number that follows."""
    for start in range(first, len(snapshots), batch):
        part = snapshots[start : start + batch]
        receipt = run.post(part, sequence, times_of(start, start + len(part)) if timed else None)
        assert receipt.duplicate
        assert receipt.n_snapshots == len(part)
        sequence += 1
    return sequence


def check_holds_exactly(run: Run, snapshots: Values) -> None:
    """Compare the mean and the count of a closed run with all snapshots that were sent."""
    assert run.wait(20.0, patience_seconds=5.0)["n_snapshots"] == len(snapshots)
    np.testing.assert_allclose(run.mean(), snapshots.mean(axis=0, dtype=np.float64), rtol=0, atol=1e-5)


@pytest.mark.parametrize("joined", [0, 1])
def test_snapshots_arrive_byte_for_byte_with_their_times(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays, joined: int
) -> None:
    snapshots = make_snapshots(61)
    done = replay(service.url, declaration, snapshots, batch=8, joined=joined)
    assert (done.code, done.state["sent"], done.state["lost"], done.told) == (OK, 61, 0, "")
    run = client.run(done.state["run"])
    assert check_stored(run, snapshots, 8) == 8
    assert run.status == "closed"
    check_holds_exactly(run, snapshots)


def test_without_times_the_declared_step_holds(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(40)
    done = replay(service.url, declaration, snapshots, batch=16, untimed=1)
    assert done.code == OK
    run = client.run(done.state["run"])
    assert check_stored(run, snapshots, 16, timed=False) == 3
    times, _ = run.coefficients()
    np.testing.assert_array_equal(times, 0.5 * np.arange(40))


@pytest.mark.parametrize(("declared", "posted"), [("float32", "float64"), ("float64", "float32")])
def test_values_are_converted_to_the_declared_type(
    client: Client,
    service: Service,
    declaration: dict[str, Any],
    make_snapshots: Make,
    replay: Replays,
    declared: str,
    posted: str,
) -> None:
    snapshots = (make_snapshots(20).astype(np.float64) + 1e-12).astype(posted)
    done = replay(service.url, {**declaration, "dtype": declared}, snapshots, batch=5)
    assert done.code == OK
    assert check_stored(client.run(done.state["run"]), snapshots.astype(declared), 5) == 4


def test_large_batches_wait_for_the_word_of_the_service(
    client: Client, service: Service, make_snapshots: Make, replay: Replays
) -> None:
    n_points = 40_000
    declaration = {"name": "roof panel", "n_points": n_points, "fields": [{"name": "p", "unit": "Pa"}]}
    snapshots = np.random.default_rng(2).normal(size=(48, 1, n_points)).astype(np.float32)
    done = replay(service.url, {**declaration, "retained_rank": 8}, snapshots, batch=16)
    assert done.code == OK
    assert check_stored(client.run(done.state["run"]), snapshots, 16) == 3


def test_the_advice_turns_when_the_modes_have_settled(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    done = replay(
        service.url, declaration, make_snapshots(4000), n=16_000, batch=64, pause_ms=0.3, until_advice=1, untimed=1
    )
    assert (done.code, done.state["advice"], done.state["verdict"]) == (OK, 1, "settled")
    assert done.state["sent"] < 16_000
    assert client.run(done.state["run"]).convergence()["verdict"]["state"] == "settled"


def test_a_service_killed_and_restarted_loses_nothing_and_doubles_nothing(
    mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(400)
    started = replay.start(mortal_service.url, declaration, snapshots, batch=20, pause_ms=10)
    time.sleep(1.0)
    mortal_service.kill()
    time.sleep(1.0)
    mortal_service.start(wait=False)
    done = started.result()
    assert (done.code, done.state["sent"], done.state["lost"]) == (OK, 400, 0)
    assert "wait in memory" in done.told
    assert "answers again" in done.told
    with Client(mortal_service.url) as client:
        run = client.run(done.state["run"])
        assert run.resource["next_sequence"] == 20
        assert check_stored(run, snapshots, 20) == 20
        check_holds_exactly(run, snapshots)


def test_a_lost_receipt_is_asked_for_again(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(80)
    proxy = CuttingProxy(service.port, n_cuts=4)
    done = replay(proxy.url, declaration, snapshots, batch=8)
    assert proxy.n_cut == 4
    proxy.close()
    assert (done.code, done.state["sent"], done.state["lost"]) == (OK, 80, 0)
    check_holds_exactly(client.run(done.state["run"]), snapshots)


def test_a_solver_that_starts_again_from_an_older_state_goes_on(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(60)
    first = replay(service.url, declaration, snapshots[:40], batch=8, detach=1)
    again = replay(service.url, first.state["run"], snapshots, batch=8, first=24)
    assert again.code == OK
    assert (again.state["held"], again.state["skipped"], again.state["sent"]) == (40, 16, 20)
    assert again.state["posts"][SKIPPED] == 16
    run = client.run(first.state["run"])
    assert check_stored(run, snapshots, 8, first=40, sequence=check_stored(run, snapshots[:40], 8)) == 8
    check_holds_exactly(run, snapshots)


def test_a_refused_batch_leaves_no_gap(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(40)
    snapshots[11, 1, 7] = np.inf
    done = replay(service.url, declaration, snapshots, batch=8, untimed=1)
    assert (done.code, done.state["sent"], done.state["lost"]) == (UNSENT, 32, 8)
    assert "was refused and is lost: The batch holds NaN or infinite values (422)" in done.told
    run = client.run(done.state["run"])
    assert run.status == "open"  # snapshots are missing, so the caller decides
    run.close()
    check_holds_exactly(run, np.concatenate([snapshots[:8], snapshots[16:]]))


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"retained_rank": 1}, "retained_rank: Input should be greater than or equal to 2"),
        ({"colour": "red"}, "colour: Extra inputs are not permitted"),
        ({"n_points": 61}, "grid of shape [6, 10] has 60 points, n_points is 61"),
    ],
)
def test_a_wrong_declaration_is_refused_with_the_reason_and_the_solver_runs_on(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays, change: Any, says: str
) -> None:
    done = replay(service.url, {**declaration, **change}, make_snapshots(20))
    assert says in done.told
    assert "(422)" in done.told
    assert (done.code, done.state["run"], done.state["posts"][NO_RUN]) == (NO_RUN, "", 20)


@pytest.mark.parametrize(
    ("url", "run", "says"),
    [
        (None, "no-such-run", "There is no such run (404)"),
        (None, "../runs?after=é", "There is no such resource (404)"),
        (None, "", "the id of the run is empty"),
        ("https://127.0.0.1:1", "any", "plain http only"),
        ("ftp://127.0.0.1", "any", "should look like http://127.0.0.1:8350"),
        ("http://127.0.0.1:80\r\nX: 1", "any", "should look like http://127.0.0.1:8350"),
        ("http://[::1", "any", "should look like http://127.0.0.1:8350"),
        ("http://127.0.0.1:1", "any", "Connection refused; is the service running there?"),
        ("http://no.such.host.invalid:80", "any", "no answer from http://no.such.host.invalid:80: "),
    ],
)
def test_a_run_that_cannot_be_had_says_why(
    service: Service, make_snapshots: Make, replay: Replays, url: str | None, run: str, says: str
) -> None:
    done = replay(url or service.url, run, make_snapshots(3), start=0.3)
    assert says in done.told
    assert done.code == NO_RUN


def test_a_snapshot_of_another_size_is_the_callers_fault(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    done = replay(service.url, declaration, make_snapshots(10)[:, :, :59], batch=4)
    assert (done.code, done.state["posts"][MISFIT], done.state["sent"]) == (OK, 10, 0)


def test_a_time_that_does_not_increase_is_the_callers_fault_and_costs_that_snapshot_only(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(16)
    done = replay(service.url, declaration, snapshots, batch=8, repeat=1)
    assert (done.code, done.state["posts"][MISFIT], done.state["sent"]) == (OK, 16, 16)
    assert check_stored(client.run(done.state["run"]), snapshots, 8) == 2


def test_a_deleted_run_ends_the_posting_but_not_the_solver(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    named = {**declaration, "name": "mixing duct, soon deleted"}
    started = replay.start(service.url, named, make_snapshots(40), n=300, batch=4, pause_ms=5)
    time.sleep(0.5)
    (run,) = [run for run in client.runs() if run.name == named["name"]]
    run.delete()
    done = started.result()
    assert done.code == UNSENT
    assert "nothing more is sent: There is no such run (404)" in done.told
    assert sum(done.state["posts"]) == 300
    assert done.state["sent"] + done.state["lost"] == 300
    assert done.state["posts"][STOPPED] > 0


def test_memory_is_bounded_while_the_service_is_away_and_the_end_is_in_time(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(64)
    relay = CuttingProxy(service.port)
    limit = 4 * snapshots[:8].nbytes  # three batches wait and one is being filled
    settings = {"batch": 8, "memory": limit, "flush": 0.5, "pause_ms": 20}
    started = replay.start(relay.url, declaration, snapshots, **settings)
    time.sleep(0.2)
    relay.close()
    began = time.monotonic()
    done = started.result()
    assert time.monotonic() - began < 64 * 0.03 + 2.5
    assert done.code == UNSENT
    state = done.state
    assert state["sent"] + state["waiting"] + state["lost"] == 64
    assert state["waiting"] == 24
    assert state["posts"][LOST] == state["lost"] // 8
    assert f"{state['waiting']} could not be sent, {state['lost']} were refused or found no room" in done.told


def test_a_solver_may_choose_to_be_held_rather_than_lose_snapshots(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(100)
    done = replay(service.url, declaration, snapshots, batch=4, memory=1, hold=20)
    assert (done.code, done.state["sent"]) == (OK, 100)
    assert check_stored(client.run(done.state["run"]), snapshots, 4) == 25


def test_the_token_travels(declaration: dict[str, Any], make_snapshots: Make, replay: Replays, tmp_path: Path) -> None:
    guarded = Service(tmp_path / "data", SLACKWATER_TOKEN="correct-horse-battery")
    guarded.start()
    try:
        done = replay(guarded.url, declaration, make_snapshots(4))
        assert "A bearer token is needed (401)" in done.told
        replay.environment = {"SLACKWATER_TOKEN": "correct-horse-battery"}
        assert replay(guarded.url, declaration, make_snapshots(4)).code == OK
    finally:
        guarded.stop()


@pytest.mark.parametrize("n_weights", [60, 120])
def test_weights_shape_the_modes(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays, n_weights: int
) -> None:
    """Modes are orthonormal in the weighted inner product, so they show which weights the service has."""
    done = replay(service.url, declaration, make_snapshots(64), batch=16, weights=n_weights)
    assert (done.code, done.told) == (OK, "")
    modes = client.run(done.state["run"]).modes(2).reshape(2, -1)
    weights = np.resize(np.arange(1.0, n_weights + 1.0), modes.shape[1])
    np.testing.assert_allclose((modes * weights) @ modes.T, np.eye(2), rtol=0, atol=1e-4)


def test_positions_arrive(
    client: Client, service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    scattered = {**declaration, "grid": {"kind": "points"}}
    done = replay(service.url, scattered, make_snapshots(8), axes=3)
    assert (done.code, done.told) == (OK, "")
    kept = np.load(service.data_directory / "runs" / done.state["run"] / "positions.npy")
    np.testing.assert_array_equal(kept, 0.5 * np.arange(1.0, 181.0).reshape(60, 3))


@pytest.mark.parametrize(
    ("settings", "says"),
    [
        ({"weights": 59}, "no weights: 59 weights came; the run takes 60, or 60 for each of its 2 fields"),
        ({"axes": 4}, "no positions: positions of 60 points on 4 axes came; the run has 60 points, on 1 to 3 axes"),
        ({"axes": 2}, "no positions: The array does not fit the declaration (422): positions belong to a run whose"),
    ],
)
def test_geometry_of_another_size_is_refused_with_the_reason(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays, settings: Any, says: str
) -> None:
    done = replay(service.url, declaration, make_snapshots(8), **settings)
    assert says in done.told
    assert done.code == OK


def test_a_frozen_service_does_not_hold_the_solver_up(
    mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(150)
    started = replay.start(mortal_service.url, declaration, snapshots, batch=8, pause_ms=10, idle=0.5)
    time.sleep(0.5)
    mortal_service.freeze()
    try:
        time.sleep(1.5)
    finally:
        mortal_service.thaw()
    done = started.result()
    assert (done.code, done.state["sent"]) == (OK, 150)
    assert "stood still" in done.told
    assert done.state["longest_ms"] < 450.0  # a request stood still for 500 ms and more, so no post waited for one
    with Client(mortal_service.url) as client:
        check_holds_exactly(client.run(done.state["run"]), snapshots)


@pytest.mark.campaign
def test_a_service_away_for_half_a_minute_loses_nothing(
    mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    snapshots = make_snapshots(4500)
    started = replay.start(mortal_service.url, declaration, snapshots, batch=20, pause_ms=10)
    time.sleep(3.0)
    mortal_service.kill()
    time.sleep(30.0)
    mortal_service.start(wait=False)
    done = started.result(timeout=200.0)
    assert (done.code, done.state["sent"], done.state["lost"]) == (OK, 4500, 0)
    with Client(mortal_service.url) as client:
        run = client.run(done.state["run"])
        assert check_stored(run, snapshots, 20) == 225
        check_holds_exactly(run, snapshots)


@pytest.mark.campaign
def test_a_service_killed_again_and_again_loses_nothing(
    mortal_service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    rng = np.random.default_rng(8)
    snapshots = make_snapshots(3000)
    started = replay.start(mortal_service.url, declaration, snapshots, batch=3, pause_ms=10)
    for pause in rng.uniform(0.2, 2.0, size=6):
        time.sleep(pause)
        mortal_service.kill()
        mortal_service.start()
    done = started.result(timeout=250.0)
    assert (done.code, done.state["sent"], done.state["lost"]) == (OK, 3000, 0)
    with Client(mortal_service.url) as client:
        run = client.run(done.state["run"])
        assert check_stored(run, snapshots, 3) == 1000
        check_holds_exactly(run, snapshots)
