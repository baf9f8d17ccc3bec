"""Which snapshot a time means, and how much of the energy a number of modes leaves out."""

from __future__ import annotations

import json

import numpy as np
import numpy.typing as npt

from service.problems import Problem
from service.results import Source


def times_of(source: Source) -> npt.NDArray[np.float64]:
    """Times of all snapshots in the checkpoint, increasing."""
    return np.asarray(source.array("time")[...], np.float64)


def nearest(source: Source, time: float) -> tuple[int, float]:
    """Number and time of the snapshot nearest to ``time``. Raises the 422 problem outside of the record."""
    times = times_of(source)
    step = (times[-1] - times[0]) / max(1, len(times) - 1)
    if not times[0] - step <= time <= times[-1] + step:
        raise Problem(
            "invalid-request", f"time={time:g}: the record of this checkpoint runs from {times[0]:g} to {times[-1]:g}"
        )
    number = int(np.argmin(np.abs(times - time)))
    return number, float(times[number])


def left_out_fraction(source: Source, n_modes: int) -> float | None:
    """Share of the total energy of the record outside of the leading modes; None for a record without energy."""
    report = json.loads(str(source.attributes["convergence"]))
    values = np.asarray(source.array("singular_value")[...], np.float64)
    if not report["modes"] or not len(values) or values[0] <= 0.0:
        return None
    first = report["modes"][0]["energy_fraction"]
    return float(max(0.0, 1.0 - first * np.sum((values[:n_modes] / values[0]) ** 2)))
