"""Which calls are hit: drawn from the calls of an undisturbed run, with a share for each part of the store."""

from __future__ import annotations

import tempfile
from collections import Counter, defaultdict
from collections.abc import Callable, Iterable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from queue import SimpleQueue
from typing import TypeVar

import numpy as np

from tests.faults.forked import Nursery
from tests.faults.scenario import Journal, check_registry, check_result, finish, play, tree
from tests.faults.shim import Call, Control

Point = TypeVar("Point")
Found = TypeVar("Found")
MAX_TOLD = 20
MEMORY = Path("/dev/shm")  # a killed process loses nothing of what it wrote, wherever that was; here a sync is free


@contextmanager
def scratch() -> Iterator[Path]:
    """A folder of its own, in memory where there is some."""
    with tempfile.TemporaryDirectory(prefix="faults-", dir=MEMORY if MEMORY.is_dir() else None) as name:
        yield Path(name).resolve()


@dataclass(frozen=True)
class Undisturbed:
    """What an undisturbed run does and leaves."""

    calls: list[Call]
    tree: list[str]


_undisturbed: dict[bool, Undisturbed] = {}


def undisturbed_run(nursery: Nursery, waiting: bool) -> Undisturbed:
    """Play the scenario without a fault, once for each way of posting."""
    if waiting not in _undisturbed:
        with scratch() as folder:
            control, data = Control(folder / "control"), folder / "data"
            with nursery.start(data, control) as service:
                assert service.wait_ready()
                play(service, Journal(), waiting)
                calls = control.calls
                finish(service, Journal({f"batch {k}": "ok" for k in range(5)}))
                check_result(service)
                service.end()
            found = tree(data)
            check_registry(data)
            control.close()
        _undisturbed[waiting] = Undisturbed(calls, found)
    return _undisturbed[waiting]


def draw(calls: Iterable[Call], shares: Mapping[str, int], factor: int, rng: np.random.Generator) -> list[int]:
    """Numbers of calls, from 1: so many of each place, times the factor."""
    by_place: dict[str, list[int]] = defaultdict(list)
    for number, call in enumerate(calls, 1):
        by_place[call.place].append(number)
    drawn: list[int] = []
    for place, numbers in sorted(by_place.items()):
        n = min(factor * shares[place], len(numbers))
        drawn += [int(k) for k in rng.choice(numbers, n, replace=False)]
    return sorted(drawn)


def at_all(nurseries: list[Nursery], points: list[Point], hit: Callable[[Nursery, Point], Found]) -> list[Found]:
    """Hit every point, as many at a time as there are nurseries. All are hit; then the failures are told, by point."""
    free: SimpleQueue[Nursery] = SimpleQueue()
    for nursery in nurseries:
        free.put(nursery)

    def one(point: Point) -> Found:
        nursery = free.get()
        try:
            return hit(nursery, point)
        finally:
            free.put(nursery)

    with ThreadPoolExecutor(len(nurseries)) as pool:
        results = [pool.submit(one, point) for point in points]
    errors = [(point, error) for point, result in zip(points, results, strict=True) if (error := result.exception())]
    told = [f"{point}: {error!r}\n" + "\n".join(getattr(error, "__notes__", [])) for point, error in errors]
    assert not errors, f"{len(errors)} of {len(points)} points failed:\n" + "\n\n".join(told[:MAX_TOLD])
    return [result.result() for result in results]


def summary(counts: Counter[str]) -> str:
    return ", ".join(f"{n} {name}" for name, n in sorted(counts.items()))
