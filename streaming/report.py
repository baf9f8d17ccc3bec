"""What the engine says about a run: the convergence report, the same in process and over HTTP."""

from __future__ import annotations

from enum import StrEnum

from pydantic import Field

from streaming.declaration import Model


class State(StrEnum):
    """The verdict. Only ``settled`` says that the run may stop."""

    GATHERING = "gathering"
    UNSETTLED = "unsettled"
    SETTLED = "settled"
    DRIFTING = "drifting"
    INSEPARABLE = "inseparable"


class Reason(Model):
    """Why the verdict is what it is: a stable code for programs, a sentence for people."""

    code: str
    text: str


class SnapshotsToGo(Model):
    """Forecast of the snapshots still needed, with its interval; ``time`` in the time unit of the run."""

    estimate: int
    low: int
    high: int
    time: float | None = Field(default=None, description="the estimate as a time, in the unit of the run")


class ModeReport(Model):
    """One mode. Energies are variances in the weighted units of the fields; fractions are of the total."""

    mode: int = Field(description="counts from 1")
    singular_value: float
    energy: float
    energy_fraction: float
    energy_fraction_low: float
    energy_fraction_high: float
    group: int = Field(description="index into groups, from 0")
    peak_frequency: float | None = None
    strouhal: float | None = None


class Travelling(Model):
    """A pair whose coefficients are in quadrature, and the wave it makes where positions are known."""

    modes: list[int]
    frequency: float
    coherence: float = Field(description="magnitude squared, 0 to 1, at that frequency")
    phase_deg: float = Field(description="of the second coefficient against the first")
    wave_length: float | None = None
    velocity: list[float] | None = Field(default=None, description="of the phase: x, y, z, length per time of the run")
    speed: float | None = Field(default=None, description="convection speed, the norm of the velocity")


class GroupReport(Model):
    """Neighbouring modes that cannot be told apart, judged as one subspace. Angles in degrees."""

    modes: list[int]
    angle_deg: float = Field(description="expected misalignment (root mean square)")
    angle_bound_deg: float = Field(description="bound on the misalignment at the stated confidence")
    truncation_angle_deg: float
    energy_halfwidth: float | None = Field(
        description="half-width of the group's energy, relative to it; null while a single block says nothing of it"
    )
    settled: bool
    travelling: Travelling | None = Field(default=None, description="the pair that these modes belong to")


class Stationarity(Model):
    """Start-up transient and drift, both with their numbers."""

    startup_snapshots: int = Field(description="snapshots at the start left out of the statistics")
    startup_in_doubt: bool = Field(description="no end of the start-up could be found in the first half")
    drift_p_value: float | None = Field(description="smallest p-value of the half against half tests, corrected")
    drifting: bool
    repeated_snapshots: int = Field(description="snapshots equal to their predecessor in every row")


class Verdict(Model):
    """The answer."""

    state: State
    reasons: list[Reason]
    settled_since: int | None = Field(default=None, description="snapshot number at which it settled")
    snapshots_to_go: SnapshotsToGo | None = None


class Convergence(Model):
    """All numbers of one evaluation, and the verdict."""

    n_snapshots: int = Field(description="snapshots in the basis")
    waiting_snapshots: int = Field(description="absorbed, not yet a full block")
    time_span: float
    startup_snapshots: int
    integral_time: float | None
    effective_samples: float | None
    n_blocks: int
    block_span: int
    total_energy: float
    captured_energy_fraction: float
    noise_edge: float | None = None
    suggested_n_modes: int | None = None
    modes: list[ModeReport]
    groups: list[GroupReport]
    stationarity: Stationarity
    verdict: Verdict
