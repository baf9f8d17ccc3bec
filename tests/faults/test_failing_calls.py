"""A call that fails, once or for ever: no receipt without durability, no sync tried again, and a full disk heals."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from tests.faults.conftest import FACTOR, SECONDS, SEED
from tests.faults.forked import Forked, Gone, Nursery
from tests.faults.points import at_all, draw, scratch, summary, undisturbed_run
from tests.faults.scenario import (
    NPY,
    Journal,
    bodies,
    check_kept,
    check_registry,
    check_result,
    finish,
    play,
    run_id,
    tree,
)
from tests.faults.shim import Control, Kind

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(SECONDS)]

SHARES = {"registry": 5, "journal": 7, "checkpoint": 3, "record": 1, "folders": 2}
SYNCS = ("fsync", "fdatasync")
NOTICE_SECONDS = 3.0


@dataclass(frozen=True)
class Failure:
    """From which call on, and how."""

    kind: Kind
    at: int


def failures(nursery: Nursery, kind: Kind) -> tuple[list[Failure], int]:
    calls = undisturbed_run(nursery, waiting=True).calls
    rng = np.random.default_rng((SEED, kind))
    return [Failure(kind, at) for at in draw(calls, SHARES, FACTOR, rng)], len(calls)


@pytest.mark.parametrize("kind", [Kind.EIO_ONCE, Kind.EIO_ALWAYS], ids=["once", "for ever"])
def test_a_call_fails(nurseries: list[Nursery], kind: Kind, report: Callable[[str], None]) -> None:
    """With EIO: what was acknowledged is there after a restart, and a failed sync ends all acknowledging."""
    chosen, n_calls = failures(nurseries[0], kind)
    expected = undisturbed_run(nurseries[0], True).tree

    def fail(nursery: Nursery, failure: Failure) -> Counter[str]:
        counts: Counter[str] = Counter()
        with scratch() as folder:
            data, journal = folder / "data", Journal()
            control = Control(folder / "control", failure.kind, failure.at)
            with nursery.start(data, control) as service:
                started = service.wait_ready() if kind == Kind.EIO_ONCE else settled(service)
                if started:
                    play(service, journal, waiting=True)
                counts[end_of(service, control, started)] += 1
                service.end()
            if control.hit:
                counts[f"in {control.hit.place}"] += 1
            control.close()
            restarted(nursery, data, journal, expected)
        counts.update({f"answers {status}": n for status, n in journal.statuses.items() if status >= 400})
        return counts

    counts = sum(at_all(nurseries, chosen, fail), Counter())
    report(f"EIO {kind.name[4:].lower()} at {len(chosen)} of {n_calls} calls: {summary(counts)}")


def settled(service: Forked) -> bool:
    """Whether it listens at all; with a disk that always fails it need not become ready."""
    return service.port is not None and not service.ended(0.2)


def end_of(service: Forked, control: Control, started: bool) -> str:
    """How the service took it, checked against the kind of call that failed."""
    hit = control.hit
    if hit is None:
        return "not reached"
    if not started or service.ended(0.0):
        return "ended at start"
    stopped = stops_acknowledging(service, NOTICE_SECONDS if hit.name in SYNCS else 0.2)
    if hit.name in SYNCS:
        assert stopped, f"{hit} failed, and the service goes on: {service.log[-2000:]}"
    return "stopped acknowledging" if stopped else "went on"


def stops_acknowledging(service: Forked, seconds: float) -> bool:
    """Not ready within so many seconds, and then no batch gets a receipt, and reading goes on."""
    deadline = time.monotonic() + seconds
    while (ready := service.ask("GET", "/readyz")).status == 200:
        if time.monotonic() > deadline:
            return False
        time.sleep(0.02)
    assert ready.status == 503, ready
    answer = service.ask("PUT", f"/v1/runs/{run_id()}/batches/77", bodies()[0], **NPY)
    assert answer.status in (503, 404, 409), answer  # unknown or closed runs take nothing anyway
    assert service.ask("GET", "/v1/runs").status == 200
    assert service.ask("GET", "/livez").status == 200
    return True


def restarted(nursery: Nursery, data: Path, journal: Journal, expected_tree: list[str]) -> None:
    with nursery.start(data) as service:
        assert service.wait_ready(), service.log
        check_kept(data, journal)
        finish(service, journal)
        check_result(service)
        service.end()
    assert tree(data) == expected_tree
    check_registry(data)


@pytest.mark.parametrize("kind", [Kind.ENOSPC_ONCE, Kind.ENOSPC_ALWAYS], ids=["once", "until room is made"])
def test_the_disk_is_full(nurseries: list[Nursery], kind: Kind, report: Callable[[str], None]) -> None:
    """With ENOSPC: refused with 507, reading goes on, and once there is room all goes on by itself."""
    chosen, n_calls = failures(nurseries[0], kind)
    expected = undisturbed_run(nurseries[0], True).tree

    def fill(nursery: Nursery, failure: Failure) -> Counter[str]:
        counts: Counter[str] = Counter()
        with scratch() as folder:
            data, journal = folder / "data", Journal()
            control = Control(folder / "control", failure.kind, failure.at)
            with nursery.start(data, control) as service:
                if settled(service) and listens(service):
                    play(service, journal, waiting=True)
                    healed = heals(service, control, journal)
                    counts["healed by itself" if healed else "stopped acknowledging"] += 1
                    if not healed:
                        counts[f"stopped at {control.hit}"] += 1
                else:
                    counts["ended at start"] += 1
                service.end()
            counts["hit" if control.n_hit else "needed no room"] += 1
            control.close()
            restarted(nursery, data, journal, expected)
        counts.update({f"answers {status}": n for status, n in journal.statuses.items() if status >= 400})
        return counts

    counts = sum(at_all(nurseries, chosen, fill), Counter())
    report(f"ENOSPC {kind.name[7:].lower()} at {len(chosen)} of {n_calls} calls: {summary(counts)}")
    assert counts["stopped acknowledging"] == 0


def listens(service: Forked) -> bool:
    try:
        return service.ask("GET", "/livez").status == 200
    except Gone:
        return False


def heals(service: Forked, control: Control, journal: Journal) -> bool:
    """Reading goes on while the disk is full; with room again, everything that was refused is taken."""
    assert service.ask("GET", "/v1/runs").status == 200
    if journal.outcomes["declare"] == "ok":
        assert service.ask("GET", f"/v1/runs/{run_id()}").status == 200
    control.lift()
    if service.ask("GET", "/readyz").status != 200:
        return False
    finish(service, journal)
    check_result(service)
    return True
