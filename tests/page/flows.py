"""A made-up flow over a grid: a travelling pair, two standing patterns that come and go, and noise."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

ROWS, COLUMNS = 24, 60
STEP_S = 0.02


def declaration(**changes: Any) -> dict[str, Any]:
    """A mixing duct of 0.6 by 0.24 m; four modes wanted out of twelve kept."""
    return {
        "name": "mixing duct, half load",
        "labels": {"load": 0.5},
        "n_points": ROWS * COLUMNS,
        "fields": [{"name": "u", "unit": "m/s"}, {"name": "v", "unit": "m/s"}],
        "grid": {"kind": "uniform", "shape": [ROWS, COLUMNS], "spacing": [0.01, 0.01]},
        "time": {"unit": "s", "step": STEP_S},
        "reference": {"length": 0.05, "speed": 2.0},
        "retained_rank": 12,
        "block_length": 16,
        "criterion": {"n_modes": 4, "max_angle_deg": 10, "hold": 2},
        **changes,
    }


def snapshots(start: int, stop: int, seed: int = 5) -> npt.NDArray[np.float32]:
    """Snapshots [start, stop), (n, 2, points) in m/s; the same for any cut of the record."""
    x, y = np.meshgrid(np.linspace(0, 6, COLUMNS), np.linspace(-1, 1, ROWS))
    hat = np.exp(-3 * y**2)
    patterns = np.stack(
        [
            np.stack([hat * np.cos(3.1 * x), y * hat * np.sin(3.1 * x)]),
            np.stack([hat * np.sin(3.1 * x), -y * hat * np.cos(3.1 * x)]),
            np.stack([y * np.exp(-((x - 2) ** 2)), hat * np.exp(-((x - 2) ** 2))]),
            np.stack([np.sin(3 * y) * np.exp(-((x - 4.5) ** 2)), y * np.exp(-((x - 4.5) ** 2))]),
        ]
    ).reshape(4, 2, -1)
    rows = []
    for k in range(start, stop):
        rng = np.random.default_rng((seed, k))
        phase = 0.9 * k + 0.3 * np.sin(0.05 * k)
        strength = 1.0 + 0.25 * rng.standard_normal()
        c = [
            strength * np.cos(phase),
            strength * np.sin(phase),
            1.1 * rng.standard_normal(),
            0.55 * rng.standard_normal(),
        ]
        field = np.tensordot(c, patterns, 1) + 0.15 * rng.standard_normal((2, ROWS * COLUMNS))
        field[0] += 2.0 * (1 - y.ravel() ** 2)
        rows.append(field)
    return np.array(rows, np.float32)
