"""The test points of a campaign side by side: what was found at each, what it cost, and how far apart they lie."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from datetime import datetime

from pydantic import Field

from service.answers import ReceiptForecast
from service.board import Advice, Published
from service.records import RunRecord, Status
from streaming.declaration import Model
from streaming.report import Convergence, State


class CampaignEntry(Model):
    """One campaign in a list."""

    name: str
    n_points: int = Field(description="test points, one run each")
    states: dict[State, int] = Field(description="how many points have each verdict")
    n_snapshots: int = Field(description="snapshots stored at all points together")


class CampaignList(Model):
    campaigns: list[CampaignEntry]


class PointMode(Model):
    """One wanted mode of a test point; fractions are of the point's total energy."""

    mode: int
    energy: float
    energy_fraction: float
    energy_fraction_low: float
    energy_fraction_high: float
    peak_frequency: float | None
    strouhal: float | None


class CampaignPoint(Model):
    """One test point: a run of the campaign."""

    run: str
    name: str
    labels: dict[str, str | bool | int | float]
    status: Status
    verdict: State
    advice: Advice
    snapshots_to_go: ReceiptForecast | None
    n_snapshots: int = Field(description="snapshots stored")
    n_applied: int = Field(description="snapshots in the basis")
    settled_since: int | None = Field(description="snapshot number at which it settled")
    time_span: float | None = Field(description="time of flow in the basis, in time_unit")
    time_unit: str
    wall_seconds: float | None = Field(description="from the declaration to the last result")
    bound_deg: float | None = Field(description="largest angle bound of the wanted groups")
    max_angle_deg: float = Field(description="the tolerance of its criterion")
    total_energy: float | None
    modes: list[PointMode]


class CampaignTotals(Model):
    """What the campaign cost, beside a plan that gives every point as much as the most demanding one took."""

    n_snapshots: int
    fixed_plan_snapshots: int | None = Field(
        description="points times the snapshots at which the last of the settled points settled; null before"
    )
    snapshots_past_settled: int = Field(description="snapshots stored after their points had settled")


class ComparedPoints(Model):
    """Angles between the subspaces of the wanted modes of two points."""

    between: list[str]
    n_modes: int
    angles_deg: list[float] = Field(description="principal angles, ascending")
    angle_deg: float = Field(description="the largest")
    sampling_deg: float | None = Field(
        description="sum of the two points' bounds: an angle below it may be sampling alone; null before both are known"
    )


class Campaign(Model):
    """All points, oldest first."""

    name: str
    points: list[CampaignPoint]
    left_out: int = Field(description="points beyond the limit of one answer, the newest")
    totals: CampaignTotals
    comparisons: list[ComparedPoints] = Field(description="one for each pair of the points named in between")


def listed(runs: Iterable[tuple[RunRecord, Published]]) -> CampaignList:
    """Campaigns by name, from all runs of the service."""
    members: dict[str, list[tuple[RunRecord, Published]]] = {}
    for run, published in runs:
        if run.declaration.campaign is not None:
            members.setdefault(run.declaration.campaign, []).append((run, published))
    return CampaignList(
        campaigns=[
            CampaignEntry(
                name=name,
                n_points=len(members[name]),
                states=Counter(published.verdict for _, published in members[name]),
                n_snapshots=sum(run.next_snapshot for run, _ in members[name]),
            )
            for name in sorted(members)
        ]
    )


def point(run: RunRecord, published: Published, last_result_at: str | None) -> CampaignPoint:
    """One test point as it stands."""
    report = None if published.report is None else Convergence.model_validate_json(published.report)
    wanted = run.declaration.criterion.n_modes
    to_go = published.snapshots_to_go
    return CampaignPoint(
        run=run.id,
        name=run.declaration.name,
        labels=run.declaration.labels,
        status=run.status,
        verdict=published.verdict,
        advice=published.advice,
        snapshots_to_go=None if to_go is None else ReceiptForecast.model_validate(to_go),
        n_snapshots=run.next_snapshot,
        n_applied=published.n_applied,
        settled_since=report.verdict.settled_since if report else None,
        time_span=report.time_span if report else None,
        time_unit=run.declaration.time.unit,
        wall_seconds=_seconds_between(run.created, last_result_at),
        bound_deg=wanted_bound_deg(report, wanted),
        max_angle_deg=run.declaration.criterion.max_angle_deg,
        total_energy=report.total_energy if report else None,
        modes=_modes(report, wanted),
    )


def wanted_bound_deg(report: Convergence | None, n_modes: int) -> float | None:
    """The largest bound of the groups that hold the wanted modes, None before there is one."""
    if report is None:
        return None
    bounds = [group.angle_bound_deg for group in report.groups if min(group.modes) <= n_modes]
    return max(bounds, default=None)


def totals(points: Sequence[CampaignPoint]) -> CampaignTotals:
    """Cost of the points, and of the plan that they can be compared with."""
    settled = [one for one in points if one.verdict is State.SETTLED and one.settled_since is not None]
    longest = max((one.settled_since or 0 for one in settled), default=None)
    return CampaignTotals(
        n_snapshots=sum(one.n_snapshots for one in points),
        fixed_plan_snapshots=None if longest is None else longest * len(points),
        snapshots_past_settled=sum(one.n_snapshots - (one.settled_since or 0) for one in settled),
    )


def _modes(report: Convergence | None, wanted: int) -> list[PointMode]:
    names = tuple(PointMode.model_fields)
    return [PointMode(**one.model_dump(include=set(names))) for one in (report.modes[:wanted] if report else [])]


def _seconds_between(start: str, end: str | None) -> float | None:
    if end is None:
        return None
    return (datetime.fromisoformat(end) - datetime.fromisoformat(start)).total_seconds()
