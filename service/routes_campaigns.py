"""Campaigns: runs that were declared under one name, side by side."""

from __future__ import annotations

from itertools import combinations
from typing import Annotated

from fastapi import APIRouter, Path, Query

from service.access import ServiceOf
from service.bodies import refusals
from service.campaigns import Campaign, CampaignList, listed, point, totals
from service.comparison import compared
from service.core import Service
from service.problems import Problem
from service.records import RunRecord

router = APIRouter(prefix="/v1/campaigns", tags=["campaigns"])

MAX_LISTED_POINTS = 200  # each brings its wanted modes; more than this is no table any more
MAX_COMPARED_POINTS = 5  # ten pairs, each of which reads the modes of both runs

Name = Annotated[str, Path(max_length=120, description="the campaign member of the declarations")]
Between = Annotated[
    str | None,
    Query(max_length=600, description="ids of two to five runs, separated by commas, whose modes are compared"),
]


@router.get("")
def list_campaigns(service: ServiceOf) -> CampaignList:
    """All campaigns by name, with the verdicts of their points counted."""
    return listed((run, service.board.get(run.id)) for run in _all_runs(service))


@router.get("/{name:path}", responses=refusals(404, 422))
def read_campaign(name: Name, service: ServiceOf, between: Between = None) -> Campaign:
    """The test points side by side: verdicts, energies with their intervals, peaks, and what they cost.

    With ``between`` also the principal angles between the wanted modes of the named points, in the weighted inner
    product of the first of each pair.
    """
    runs = [run for run in reversed(_all_runs(service)) if run.declaration.campaign == name]
    if not runs:
        raise Problem("not-found", f"no run belongs to a campaign {name!r}; GET /v1/campaigns lists those there are")
    points = [point(run, service.board.get(run.id), service.reader.last_result_at(run.id)) for run in runs]
    return Campaign(
        name=name,
        points=points[:MAX_LISTED_POINTS],
        left_out=max(0, len(points) - MAX_LISTED_POINTS),
        totals=totals(points),
        comparisons=[compared(service, *pair) for pair in combinations(_chosen(between, runs), 2)],
    )


def _all_runs(service: Service) -> list[RunRecord]:
    return service.reader.runs(limit=service.settings.max_runs)


def _chosen(between: str | None, runs: list[RunRecord]) -> list[str]:
    """Ids to compare, checked. Raises the 422 problem."""
    if between is None:
        return []
    chosen = list(dict.fromkeys(part.strip() for part in between.split(",") if part.strip()))
    known = {run.id for run in runs}
    unknown = [run for run in chosen if run not in known]
    if unknown:
        raise Problem("invalid-request", f"between: {unknown[0]!r} is no run of this campaign; name run ids")
    if not 2 <= len(chosen) <= MAX_COMPARED_POINTS:
        raise Problem("invalid-request", f"between names {len(chosen)} runs; name 2 to {MAX_COMPARED_POINTS}")
    return chosen
