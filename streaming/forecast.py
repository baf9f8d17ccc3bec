"""How many more snapshots: the misalignment falls like the inverse square root of the record length."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from scipy.stats import chi2

from streaming.declaration import Criterion
from streaming.evidence import Context, Evidence
from streaming.findings import MIN_BLOCKS, MIN_EFFECTIVE_SAMPLES
from streaming.looks import GROWTH
from streaming.report import SnapshotsToGo
from streaming.verdict import Look, agreeing_looks

MAX_RATIO = 1000.0  # beyond so many times the present record a forecast says nothing that one could plan with
NO_GAP = 0.3  # of the gap needed to tell two modes apart; a smaller one is likely chance, and foretells nothing
LEVEL = 0.9  # of the interval, common practice


@dataclass(frozen=True)
class Need:
    """Length of record needed, relative to the present one: estimate and interval."""

    estimate: float
    low: float
    high: float


def forecast(evidence: Evidence, criterion: Criterion, context: Context, look: Look) -> SnapshotsToGo | None:
    """Snapshots to go until the verdict can be settled, or None when that cannot be foreseen."""
    needs = [Need(1.0, 1.0, 1.0), *_angle_needs(evidence, criterion), *_other_needs(evidence, criterion, context)]
    need = Need(*(max(getattr(n, name) for n in needs) for name in ("estimate", "low", "high")))
    if need.estimate >= MAX_RATIO:
        return None
    agreeing = agreeing_looks(look, context.previous, criterion.max_angle_deg) if look.sound else 0
    least = max(1, criterion.hold - agreeing)
    numbers = [_through_looks(context.n_snapshots, ratio, least) for ratio in (need.estimate, need.low, need.high)]
    step = context.time_step
    return SnapshotsToGo(
        estimate=numbers[0],
        low=numbers[1],
        high=numbers[2],
        time=None if step is None else numbers[0] * step,
    )


def _angle_needs(evidence: Evidence, criterion: Criterion) -> Iterator[Need]:
    tolerance = math.sin(math.radians(criterion.max_angle_deg))
    for m in evidence.misalignments:
        yield angle_need(m.sampling_bound, m.truncation, tolerance, m.freedom)


def angle_need(sampling: float, truncation: float, tolerance: float, freedom: float) -> Need:
    """Record needed until sampling * ratio^(-1/2) + truncation falls to the tolerance, all sines.

    The interval is that of the variance behind ``sampling``, known to freedom / chi2(freedom).
    """
    room = tolerance - truncation
    if room <= 0.0:
        return Need(MAX_RATIO, MAX_RATIO, MAX_RATIO)
    ratio = (sampling / room) ** 2
    low, high = (float(chi2.ppf(q, freedom)) / freedom for q in ((1.0 - LEVEL) / 2, (1.0 + LEVEL) / 2))
    return Need(ratio, ratio / high, ratio / max(low, 1e-9))


def _other_needs(evidence: Evidence, criterion: Criterion, context: Context) -> Iterator[Need]:
    """Clauses whose numbers grow or shrink in a known way with the record."""
    ratios = [MIN_BLOCKS / evidence.modal.n_blocks]
    if evidence.effective_samples > 0:
        ratios.append(MIN_EFFECTIVE_SAMPLES / evidence.effective_samples)
    if criterion.min_duration is not None:
        ratios.append(criterion.min_duration / context.time_span if context.time_span > 0 else MAX_RATIO)
    if criterion.max_energy_halfwidth is not None:
        known = [half for half in evidence.halfwidths if half is not None]
        ratios += [(half / criterion.max_energy_halfwidth) ** 2 for half in known] or [MAX_RATIO]
    for ratio in ratios:
        yield Need(ratio, ratio, ratio)
    start = evidence.grouping.open_start
    if start is not None:
        yield _opening_need(evidence, start, criterion.n_modes)


def _opening_need(evidence: Evidence, start: int, n_modes: int) -> Need:
    """Record needed to close an open group at the clearest gap from the last wanted mode on.

    F grows like N where there is a gap; its root, the gap in standard errors, is known to about +- 1.6.
    """
    statistics = evidence.grouping.statistics[max(start, n_modes - 1) :]
    gap, needed = math.sqrt(float(statistics.max(initial=0.0))), math.sqrt(evidence.grouping.critical)
    if gap <= NO_GAP * needed:
        return Need(MAX_RATIO, MAX_RATIO, MAX_RATIO)
    return Need((needed / gap) ** 2, (needed / (gap + 1.6)) ** 2, (needed / max(gap - 1.6, NO_GAP)) ** 2)


def _through_looks(n_snapshots: int, ratio: float, least: int) -> int:
    """Snapshots until the first look at which the need is met, and not before ``least`` more looks."""
    needed = math.ceil(math.log(min(max(ratio, 1.0), MAX_RATIO)) / math.log(GROWTH) - 1e-9)
    return math.ceil(n_snapshots * (GROWTH ** max(needed, least) - 1.0))
