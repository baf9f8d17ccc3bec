"""The scenario of the demonstration: air drawn through an intake duct past a row of three unequal bars.

Air at room temperature enters a duct 96 mm high and passes three bars of rectangular section that guard the
intake. Each bar sheds vortices at a rate of its own, the wakes meet and beat against each other, so that the flow
has several frequencies and does not repeat itself. Reynolds number 140 by the height of the largest bar and the
mean speed of the inflow: laminar, so that a two-dimensional solver with a cell of 1 mm is a fair model of it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from service.demo.lattice import Lattice, Mask, Openings, Single

CELL_M = 0.001
HEIGHT_CELLS, LENGTH_CELLS = 96, 220
BAR_HEIGHT_M = 0.012  # the largest bar: the reference length
SPEED_M_S = 0.175  # mean of the inflow: the reference speed
VISCOSITY_M2_S = 1.5e-5  # air at about 20 degrees Celsius, rounded (handbook value, from memory)
REYNOLDS = SPEED_M_S * BAR_HEIGHT_M / VISCOSITY_M2_S

# Speed of the inflow in cells per step. The flow between the bars is about 2.4 times as fast, a Mach number of
# 0.31 by the speed of sound of the lattice: errors of compressibility stay at some percent, steps stay few.
LATTICE_SPEED = 0.075
STEP_S = LATTICE_SPEED * CELL_M / SPEED_M_S

# Over the last columns the viscosity grows, so that vortices leave without throwing waves back. These columns,
# and the few before them that feel it, are not flow anybody should look at, and are not recorded.
SPONGE_CELLS, SPONGE_VISCOSITY = 40, 0.12
RECORDED_CELLS = LENGTH_CELLS - SPONGE_CELLS - 8

# The largest bar, which carries the two leading modes, sheds at a Strouhal number of 0.27; the two smaller ones at
# 0.36 and 0.43 (all by the reference length and speed, measured over 2500 snapshots of this solver).
SHEDDING_STROUHAL = (0.25, 0.29)

# Every 64 steps, 27 ms: about nine snapshots in a period of the slowest bar, five in one of the fastest.
STEPS_PER_SNAPSHOT = 64
# Start-up that is not posted: the air that filled the duct at first has left it about four times over.
WARM_UP_STEPS = 12_800
# What a plan made beforehand would take, to be safe; the run ends here if it was not told to end before.
FIXED_PLAN_SNAPSHOTS = 4000


@dataclass(frozen=True)
class Bar:
    """A bar of rectangular section, in cells from the inlet and from the lower wall."""

    front: int
    back: int
    bottom: int
    top: int


BARS = (Bar(44, 56, 18, 30), Bar(50, 56, 52, 59), Bar(44, 56, 76, 84))


def solid_cells() -> Mask:
    """Cells inside the bars, (rows, columns) from the lower wall and from the inlet."""
    solid = np.zeros((HEIGHT_CELLS, LENGTH_CELLS), dtype=np.bool_)
    for bar in BARS:
        solid[bar.bottom : bar.top, bar.front : bar.back] = True
    return solid


def inflow_profile() -> Single:
    """Speed over the height, mean 1: even in the middle, zero at the walls, as behind a short entry."""
    across = 2.0 * (np.arange(HEIGHT_CELLS) + 0.5) / HEIGHT_CELLS - 1.0
    profile = 1.0 - across**8
    scaled: Single = (profile / profile.mean()).astype(np.float32)
    return scaled


def lattice_viscosity() -> Single:
    """Viscosity of each column in lattice units, with the sponge before the outlet."""
    viscosity = np.full(LENGTH_CELLS, VISCOSITY_M2_S * STEP_S / CELL_M**2)
    viscosity[-SPONGE_CELLS:] += SPONGE_VISCOSITY * np.linspace(0.0, 1.0, SPONGE_CELLS) ** 2
    return viscosity.astype(np.float32)


class IntakeFlow:
    """The flow through the intake, in metres and seconds. There is no chance in it: each run is the same."""

    def __init__(self) -> None:
        inflow = (LATTICE_SPEED * inflow_profile()).astype(np.float32)
        self._lattice = Lattice(solid_cells(), lattice_viscosity(), Openings(inflow))
        self._lattice.start(inflow)
        self.n_steps = 0

    def advance(self, n_steps: int) -> None:
        """Go on by ``n_steps``."""
        for _ in range(n_steps):
            self._lattice.step()
        self.n_steps += n_steps

    @property
    def time_s(self) -> float:
        return self.n_steps * STEP_S

    def fields(self) -> Single:
        """Speeds along and across the duct, m/s, (2, rows, recorded columns); zero inside the bars."""
        to_physical = np.float32(SPEED_M_S / LATTICE_SPEED)
        return np.stack(self._lattice.velocity())[:, :, :RECORDED_CELLS] * to_physical

    def lattice_speed(self) -> float:
        """Return the fastest speed anywhere, in cells per step; NaN or large when the solution is broken."""
        x, y = self._lattice.velocity()
        return float(np.sqrt(x * x + y * y).max())

    def flow_rates(self) -> tuple[float, float]:
        """Return what passes the column behind the inlet and the last recorded one, relative to the inflow."""
        flux = self._lattice.moments[1].sum(axis=0, dtype=np.float64) / (LATTICE_SPEED * HEIGHT_CELLS)
        return float(flux[1]), float(flux[RECORDED_CELLS - 1])


def declaration(name: str) -> dict[str, Any]:
    """Return the run as it is declared to the service: the two leading modes to 10 degrees at 95 %."""
    return {
        "name": name,
        "labels": {"reynolds": round(REYNOLDS, 1), "bars": len(BARS)},
        "n_points": HEIGHT_CELLS * RECORDED_CELLS,
        "fields": [{"name": "u", "unit": "m/s"}, {"name": "v", "unit": "m/s"}],
        "dtype": "float32",
        "grid": {
            "kind": "uniform",
            "shape": [HEIGHT_CELLS, RECORDED_CELLS],
            "spacing": [CELL_M, CELL_M],
            "origin": [CELL_M / 2, CELL_M / 2],
        },
        "time": {"unit": "s", "step": STEPS_PER_SNAPSHOT * STEP_S},
        "reference": {"length": BAR_HEIGHT_M, "speed": SPEED_M_S},
        "retained_rank": 24,
        "criterion": {"n_modes": 2, "max_angle_deg": 10.0, "confidence": 0.95},
    }
