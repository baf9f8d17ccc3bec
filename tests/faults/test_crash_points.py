"""Killed at a call, and again at a call of the recovery: nothing acknowledged is lost, nothing counts twice."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from tests.faults.conftest import FACTOR, SECONDS, SEED
from tests.faults.forked import Nursery
from tests.faults.points import at_all, draw, scratch, summary, undisturbed_run
from tests.faults.scenario import Journal, check_kept, check_registry, check_result, finish, play, tree
from tests.faults.shim import Call, Control, Kind

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(SECONDS)]

# Checkpoints make nine calls in ten, and are all of one kind; the rest is where receipts come from.
SHARES = {"registry": 12, "journal": 14, "checkpoint": 10, "record": 2, "folders": 4}
# Calls of a recovery: the first hundred or so are the start, then blocks are applied again.
MAX_RECOVERY_CALL = 600
RECOVERY_SECONDS = 0.4


@dataclass(frozen=True)
class CrashPoint:
    """Where the process is killed, and where the one that recovers is."""

    waiting: bool
    kind: Kind
    at: int
    recovery_at: int


def points(waiting: bool, calls: list[Call]) -> list[CrashPoint]:
    rng = np.random.default_rng((SEED, waiting))
    chosen = draw(calls, SHARES, FACTOR, rng)
    return [
        CrashPoint(
            waiting,
            Kind.TEAR if calls[at - 1].name in ("write", "pwrite") and rng.random() < 0.5 else Kind.KILL,
            at,
            int(np.exp(rng.uniform(0, np.log(MAX_RECOVERY_CALL)))),
        )
        for at in chosen
    ]


@pytest.mark.parametrize("waiting", [True, False], ids=["in step", "at once"])
def test_killed_at_a_call(nurseries: list[Nursery], waiting: bool, report: Callable[[str], None]) -> None:
    expected = undisturbed_run(nurseries[0], waiting)

    def crash(nursery: Nursery, point: CrashPoint) -> Counter[str]:
        return hit(nursery, point, expected.tree)

    chosen = points(waiting, expected.calls)
    counts = sum(at_all(nurseries, chosen, crash), Counter())
    report(
        f"killed at {len(chosen)} of {len(expected.calls)} calls, posting {'in step' if waiting else 'at once'}: "
        f"{summary(counts)}"
    )
    assert counts["torn or killed"] > len(chosen) * 0.9


def hit(nursery: Nursery, point: CrashPoint, expected_tree: list[str]) -> Counter[str]:
    counts: Counter[str] = Counter()
    with scratch() as folder:
        data, journal = folder / "data", Journal()
        control = Control(folder / "control", point.kind, point.at)
        with nursery.start(data, control) as service:
            if service.wait_ready():
                play(service, journal, point.waiting)
                service.ended(RECOVERY_SECONDS)
            service.end()
        counts["torn or killed" if control.n_hit else "not reached"] += 1
        if control.hit:
            counts[f"in {control.hit.place}"] += 1
        control.close()
        counts["killed in recovery"] += killed_again(nursery, folder, point.recovery_at)
        with nursery.start(data) as service:
            assert service.wait_ready(), service.log
            counts["acknowledged before"] += len(check_kept(data, journal))
            finish(service, journal)
            check_result(service)
            assert "Traceback" not in service.log, service.log
            service.end()
        assert tree(data) == expected_tree
        check_registry(data)
    return counts


def killed_again(nursery: Nursery, folder: Path, at: int) -> bool:
    """Start to recover, and be killed in it; False when it had recovered before so many calls."""
    control = Control(folder / "control", Kind.KILL, at)
    with nursery.start(folder / "data", control) as service:
        killed = not service.wait_ready() or service.ended(RECOVERY_SECONDS)
        service.end()
    control.close()
    return killed
