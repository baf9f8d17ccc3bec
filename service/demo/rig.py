"""The rig of the campaign demonstration: pressure taps of a roof panel in a tunnel, written as files, burst by burst.

A made-up panel, not a model of a real one: what its five test points have in common is a vortex that travels along the
leading edge (a pair of modes) and a slower breathing of the whole panel (one mode), in the noise of the taps.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

ROWS, COLUMNS = 12, 16
SPACING_M = 0.05
STEP_S = 0.01
BURST_SNAPSHOTS = 50
MAX_BURSTS = 80  # the plan: so many at each point unless the operator moves on before
VORTEX_PA, BREATHING_PA, NOISE_PA = 300.0, 110.0, 6.0  # of the unit patterns; and of each tap
PAUSE_SECONDS = 0.06  # a burst stands for half a second of measurement; the demonstration is quicker


@dataclass(frozen=True)
class Point:
    """One test point.

    Attributes
    ----------
    growth : factor by which the vortex is stronger at the end of the plan than at its start, minus one
    breathing : whether the panel breathes; without it no third mode stands out of the noise
    """

    incidence_deg: int
    growth: float = 0.0
    breathing: bool = True


POINTS = (
    Point(0),
    Point(15),
    Point(30, growth=4.0),  # the fan is still running up
    Point(45),
    Point(60, breathing=False),
)


def patterns(incidence_deg: int) -> Array:
    """Three orthonormal patterns (3, taps): the two phases of the travelling vortex, and the breathing."""
    y, x = np.meshgrid(np.linspace(0, 1, ROWS), np.linspace(0, 1, COLUMNS), indexing="ij")
    along = x * np.cos(np.radians(incidence_deg)) + y * np.sin(np.radians(incidence_deg))
    edge = np.exp(-(((y - 0.25 - 0.3 * x) / 0.25) ** 2))
    raw = np.stack(
        [edge * np.cos(4 * np.pi * along), edge * np.sin(4 * np.pi * along), np.sin(np.pi * x) * np.sin(np.pi * y)]
    ).reshape(3, -1)
    basis, _ = np.linalg.qr(raw.T)
    return np.asarray(basis.T)


def snapshots(point: Point, n: int) -> Array:
    """Pressures (n, rows, columns) in Pa of the whole plan at one point; the same at every call."""
    rng = np.random.default_rng(100 + point.incidence_deg)
    phase = np.cumsum(2 * np.pi * 0.11 + 0.25 * rng.standard_normal(n))
    strength = VORTEX_PA * (1.0 + point.growth * np.linspace(0.0, 1.0, n)) * (1.0 + 0.2 * _memory(rng, n, 0.7))
    breath = BREATHING_PA * _memory(rng, n, 0.8) * point.breathing
    coefficients = np.stack([strength * np.cos(phase), strength * np.sin(phase), breath], axis=1)
    values = coefficients @ patterns(point.incidence_deg) - 40.0
    return np.asarray(values + NOISE_PA * rng.standard_normal(values.shape)).reshape(n, ROWS, COLUMNS)


def _memory(rng: np.random.Generator, n: int, correlation: float) -> Array:
    """A stationary first-order autoregressive series (n,) of unit variance."""
    steps = np.sqrt(1.0 - correlation**2) * rng.standard_normal(n)
    series = np.empty(n)
    series[0] = rng.standard_normal()
    for k in range(1, n):
        series[k] = correlation * series[k - 1] + steps[k]
    return series


def write_bursts(point: Point, folder: Path) -> None:
    """Write the plan of one point, each burst in two halves under its final name, as many rigs do."""
    values = snapshots(point, MAX_BURSTS * BURST_SNAPSHOTS).astype(np.float32)
    times = STEP_S * np.arange(len(values))
    for k in range(MAX_BURSTS):
        part = slice(k * BURST_SNAPSHOTS, (k + 1) * BURST_SNAPSHOTS)
        hidden, path = folder / ".burst.npz", folder / f"burst{k + 1}.npz"
        np.savez(hidden, p=values[part], time=times[part])
        raw = hidden.read_bytes()
        with path.open("wb") as file:
            file.write(raw[: len(raw) // 2])
            file.flush()
            time.sleep(PAUSE_SECONDS / 3)
            file.write(raw[len(raw) // 2 :])
        time.sleep(2 * PAUSE_SECONDS / 3)
    hidden.unlink(missing_ok=True)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("number", type=int, help="which test point, from 0")
    parser.add_argument("folder", type=Path, help="where to write")
    given = parser.parse_args()
    write_bursts(POINTS[given.number], given.folder)


if __name__ == "__main__":
    main()
