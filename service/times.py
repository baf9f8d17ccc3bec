"""Times of a batch, from the query of its request."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.problems import Problem
from streaming.declaration import RunDeclaration

# Ranks that sum their time steps for themselves, or again after a restart, differ by rounding and no more.
ROUNDING_FRACTION = 1e-9


@dataclass(frozen=True)
class TimesGiven:
    """What the query says: each time, or a start and a step, or nothing (then the declared step counts)."""

    each: tuple[float, ...] = ()
    start: float | None = None
    step: float | None = None

    def for_batch(self, n_snapshots: int, declaration: RunDeclaration) -> npt.NDArray[np.float64] | None:
        """The times (n_snapshots,), or None. Raises the 422 problem."""
        if self.each:
            if self.start is not None or self.step is not None:
                raise Problem("wrong-times", "give each time, or start_time and time_step, not both")
            return _checked(np.array(self.each, np.float64), n_snapshots)
        if self.start is None:
            if self.step is not None:
                raise Problem("wrong-times", "time_step needs a start_time")
            return None
        step = self.step if self.step is not None else declaration.time.step
        if step is None and n_snapshots > 1:
            raise Problem("wrong-times", "start_time needs a time_step here, since the run declares no time.step")
        return _checked(self.start + (step or 1.0) * np.arange(n_snapshots, dtype=np.float64), n_snapshots)


def _checked(times: npt.NDArray[np.float64], n_snapshots: int) -> npt.NDArray[np.float64]:
    if len(times) != n_snapshots:
        raise Problem("wrong-times", f"{len(times)} times came with {n_snapshots} snapshots; give one for each")
    if not np.isfinite(times).all():
        raise Problem("wrong-times", f"time {float(times[~np.isfinite(times)][0])} is not finite")
    back = np.flatnonzero(np.diff(times) <= 0)
    if len(back):
        k = int(back[0])
        raise Problem(
            "wrong-times",
            f"times must increase: snapshot {k} has {float(times[k])}, snapshot {k + 1} has {float(times[k + 1])}",
        )
    return times


def check_neighbours(first: float, last: float, before: float | None, after: float | None) -> None:
    """Raise the 422 problem unless the batch lies between the stored batches beside it."""
    if before is not None and not before < first:
        raise Problem("wrong-times", f"the batch starts at {first}, the stored batch before it ends at {before}")
    if after is not None and not last < after:
        raise Problem("wrong-times", f"the batch ends at {last}, the stored batch after it starts at {after}")


def same_times(one: npt.NDArray[np.float64] | None, other: npt.NDArray[np.float64] | None) -> bool:
    """True when two parts mean the same times, or when neither gives any."""
    if one is None or other is None:
        return one is other
    return len(one) == len(other) and np.allclose(one, other, rtol=ROUNDING_FRACTION, atol=0.0)


def parse_number(name: str, text: str) -> float:
    """A finite number from a query. Raises the 422 problem."""
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise Problem("wrong-times", f"{name}={text[:40]!r} is no finite number")
    return value
