"""What the service answers: receipts as frozen values, convergence reports as typed dictionaries.

Members that this version does not know are left out of receipts and kept in reports, so that an older client
goes on working with a newer service.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal, NotRequired, TypedDict, cast

Advice = Literal["continue", "may stop"]
State = Literal["gathering", "unsettled", "settled", "drifting", "inseparable"]


@dataclass(frozen=True)
class SnapshotsToGo:
    """Forecast of the snapshots still needed, with its interval."""

    estimate: int
    low: int
    high: int


@dataclass(frozen=True)
class Receipt:
    """The service has the batch on disk.

    Attributes
    ----------
    sequence : number of the batch, from 0
    first_snapshot : number of its first snapshot in the run; None while an earlier batch is missing
    n_snapshots : snapshots in it
    duplicate : True when the service had it already; it counts once
    complete : True when all parts of the batch are there; always so in a run without parts
    applied_through : number of the last batch that the engine has taken in, or None before the first
    verdict : state of the run at the moment of the receipt
    advice : "continue", or "may stop" once the modes have settled
    snapshots_to_go : forecast, or None when there is none
    """

    sequence: int
    first_snapshot: int | None
    n_snapshots: int
    duplicate: bool
    applied_through: int | None
    verdict: State
    advice: Advice
    snapshots_to_go: SnapshotsToGo | None
    complete: bool = True


class Reason(TypedDict):
    code: str
    text: str


class Verdict(TypedDict):
    state: State
    reasons: list[Reason]
    settled_since: int | None
    snapshots_to_go: dict[str, Any] | None


class GroupReport(TypedDict):
    """Neighbouring modes judged as one subspace; angles in degrees."""

    modes: list[int]
    angle_deg: float
    angle_bound_deg: float
    truncation_angle_deg: float
    energy_halfwidth: float
    settled: bool


class ModeReport(TypedDict):
    """One mode, counted from 1; energies in the squared units of the fields, fractions of the total."""

    mode: int
    singular_value: float
    energy: float
    energy_fraction: float
    energy_fraction_low: float
    energy_fraction_high: float
    group: int
    peak_frequency: float | None
    strouhal: float | None


class ConvergenceReport(TypedDict):
    """All numbers of one evaluation, and the verdict."""

    n_snapshots: int
    waiting_snapshots: NotRequired[int]
    time_span: float
    startup_snapshots: int
    integral_time: float | None
    effective_samples: float | None
    n_blocks: int
    block_span: int
    total_energy: float
    captured_energy_fraction: float
    noise_edge: float | None
    suggested_n_modes: int | None
    modes: list[ModeReport]
    groups: list[GroupReport]
    stationarity: dict[str, Any]
    verdict: Verdict


def parse_receipt(answer: Mapping[str, Any]) -> Receipt:
    """A receipt from its JSON."""
    return Receipt(
        sequence=int(answer["sequence"]),
        first_snapshot=_optional_int(answer.get("first_snapshot")),
        n_snapshots=int(answer["n_snapshots"]),
        duplicate=bool(answer.get("duplicate", False)),
        applied_through=_optional_int(answer.get("applied_through")),
        verdict=cast(State, answer["verdict"]),
        advice="may stop" if answer.get("advice") == "may stop" else "continue",
        snapshots_to_go=_parse_to_go(answer.get("snapshots_to_go")),
        complete=bool(answer.get("complete", True)),
    )


def _optional_int(value: Any) -> int | None:
    return None if value is None else int(value)


def _parse_to_go(answer: Mapping[str, Any] | None) -> SnapshotsToGo | None:
    if answer is None:
        return None
    return SnapshotsToGo(int(answer["estimate"]), int(answer["low"]), int(answer["high"]))
