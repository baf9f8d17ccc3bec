"""One evaluation of a run: from block moments to numbers and verdict, pure functions of the small space."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.stats import t as student

from streaming.declaration import Criterion, Reference
from streaming.findings import failing_clauses, needs
from streaming.forecast import longest, snapshots_to_go
from streaming.groups import Grouping, find_groups
from streaming.hidden import Hidden, hidden_structure
from streaming.misalignment import Misalignment, misalignment
from streaming.modal import ModalMoments, modal_moments, score_variance
from streaming.moments import Moments
from streaming.report import (
    Convergence,
    GroupReport,
    ModeReport,
    Reason,
    SnapshotsToGo,
    State,
    Stationarity,
    Verdict,
)
from streaming.stationarity import Drift, Startup, find_drift, find_startup
from streaming.verdict import Look, decide

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Context:
    """What the stream knows beside the block moments.

    Attributes
    ----------
    n_snapshots : snapshots in the basis
    waiting_snapshots : absorbed, not yet a full block
    block_length : L
    n_rows : m, rows of a snapshot; with it the noise edge is known
    time_step : median time between snapshots, in the unit of the run
    time_span : time from the first to the last snapshot in the basis
    repeated_snapshots : snapshots equal to their predecessor in every row
    previous : earlier looks, oldest first
    at_look : whether this evaluation may change the verdict
    reference : makes frequencies Strouhal numbers
    peak_frequencies : of the leading modes, when they were computed; None where a mode has no clear peak
    """

    n_snapshots: int
    block_length: int
    waiting_snapshots: int = 0
    n_rows: int | None = None
    time_step: float | None = None
    time_span: float = 0.0
    repeated_snapshots: int = 0
    previous: tuple[Look, ...] = ()
    at_look: bool = True
    reference: Reference | None = None
    peak_frequencies: tuple[float | None, ...] = ()


@dataclass(frozen=True)
class Assessment:
    """All that one evaluation found.

    Attributes
    ----------
    eigenvalues : (R,) energies of the modes, descending
    mode_rotation : (R, R) orthogonal; column k is mode k + 1 in basis coordinates
    coordinate_mean : (R,) mean of the basis coordinates over the retained record
    n_retained : snapshots behind the statistics, without the start-up
    look : the verdict, and what the next look needs to know of this one
    """

    eigenvalues: Array
    mode_rotation: Array
    coordinate_mean: Array
    n_retained: int
    energy_halfwidths: Array
    fraction_halfwidths: Array
    total_energy: float
    captured_energy_fraction: float
    startup_snapshots: int
    n_blocks: int
    block_span: int
    startup: Startup
    drift: Drift
    grouping: Grouping
    groups: tuple[tuple[int, int], ...]
    group_halfwidths: tuple[float, ...]
    misalignments: tuple[Misalignment, ...]
    hidden: Hidden
    integral_time: float | None
    effective_samples: float | None
    noise_edge: float | None
    suggested_n_modes: int | None
    snapshots_to_go: SnapshotsToGo | None
    look: Look


def assess(moments: Moments, criterion: Criterion, context: Context) -> Assessment:
    """Evaluate a run from its block moments."""
    startup = find_startup(moments, criterion.n_modes) if criterion.startup == "find" else Startup(0, False)
    kept = moments.since(startup.first_block)
    modal = modal_moments(kept, kept.rank)
    grouping = find_groups(modal, criterion.n_modes)
    groups = wanted_groups(grouping, criterion.n_modes, modal.rank)
    misalignments = tuple(misalignment(modal, group, criterion.confidence) for group in groups)
    halfwidths = energy_halfwidths(modal, criterion.confidence)
    group_halfwidths = tuple(group_halfwidth(modal, group, criterion.confidence) for group in groups)
    drift = find_drift(modal, criterion.n_modes)
    hidden = hidden_structure(modal, criterion.n_modes)
    span = int(moments.counts[0])
    findings = failing_clauses(
        criterion, modal, startup, drift, grouping, groups, misalignments, group_halfwidths, hidden, context
    )
    summary = (
        f"The largest misalignment bound is {max((m.bound_deg for m in misalignments), default=0.0):.1f} deg at "
        f"{100 * criterion.confidence:g} % confidence, within the tolerated {criterion.max_angle_deg:g} deg."
    )
    if context.at_look or not context.previous:
        look = decide(findings, context.n_snapshots, groups, context.previous, criterion.hold, summary)
    else:
        look = context.previous[-1]
    to_go = None
    if look.state != State.SETTLED:
        need = longest(needs(criterion, modal, grouping, misalignments, context))
        to_go = snapshots_to_go(need, context.n_snapshots, criterion.hold, context.time_step)
    effective = min((m.effective_samples for m in misalignments), default=None)
    step = context.time_step
    return Assessment(
        eigenvalues=modal.eigenvalues,
        mode_rotation=modal.rotation,
        coordinate_mean=modal.mean,
        n_retained=modal.n_snapshots,
        energy_halfwidths=halfwidths,
        fraction_halfwidths=fraction_halfwidths(modal, criterion.confidence),
        total_energy=modal.total_energy,
        captured_energy_fraction=_fraction(modal.captured_energy, modal.total_energy),
        startup_snapshots=moments.n_snapshots - modal.n_snapshots,
        n_blocks=modal.n_blocks,
        block_span=span,
        startup=startup,
        drift=drift,
        grouping=grouping,
        groups=groups,
        group_halfwidths=group_halfwidths,
        misalignments=misalignments,
        hidden=hidden,
        integral_time=None if not effective or step is None else step * modal.n_snapshots / (2 * effective),
        effective_samples=effective,
        noise_edge=None,
        suggested_n_modes=None,
        snapshots_to_go=to_go,
        look=look,
    )


def wanted_groups(grouping: Grouping, n_modes: int, rank: int) -> tuple[tuple[int, int], ...]:
    """Groups that hold the wanted modes; one that does not close is taken up to the last mode but one."""
    if grouping.open_start is None:
        return grouping.groups
    stop = max(grouping.open_start + 1, min(rank - 1, n_modes))
    return (*grouping.groups, (grouping.open_start, stop)) if grouping.open_start < rank else grouping.groups


def energy_halfwidths(modal: ModalMoments, confidence: float) -> Array:
    """Half-width of the energy of each scored mode, t_{B-1} sqrt(V_ii), (K,)."""
    k = np.arange(modal.n_scored)
    return _quantile(modal, confidence) * np.sqrt(score_variance(modal.scores[:, k, k], 1))


def group_halfwidth(modal: ModalMoments, group: tuple[int, int], confidence: float) -> float:
    """Half-width of the summed energy of a group, relative to it."""
    k = np.arange(*group)
    spread = np.sqrt(score_variance(modal.scores[:, k, k].sum(axis=1), 1))
    return float(
        _quantile(modal, confidence) * spread / max(modal.eigenvalues[k].sum(), np.finfo(float).tiny)
    )


def fraction_halfwidths(modal: ModalMoments, confidence: float) -> Array:
    """Half-width of each mode's share of the total energy by the delta method, (K,)."""
    k = np.arange(modal.n_scored)
    shares = modal.eigenvalues[k] / max(modal.total_energy, np.finfo(float).tiny)
    totals = modal.shares * (modal.block_energies - modal.block_energies @ modal.shares)
    scores = (modal.scores[:, k, k] - shares * totals[:, None]) / max(
        modal.total_energy, np.finfo(float).tiny
    )
    return _quantile(modal, confidence) * np.sqrt(score_variance(scores, 1))


def _quantile(modal: ModalMoments, confidence: float) -> float:
    return float(student.ppf(0.5 + confidence / 2, max(modal.n_blocks - 1, 1)))


def _fraction(part: float, whole: float) -> float:
    return min(part / whole, 1.0) if whole > 0 else 0.0


def report(assessment: Assessment, context: Context) -> Convergence:
    """Lay an assessment out as the public report."""
    a = assessment
    return Convergence(
        n_snapshots=context.n_snapshots,
        waiting_snapshots=context.waiting_snapshots,
        time_span=context.time_span,
        startup_snapshots=a.startup_snapshots,
        integral_time=a.integral_time,
        effective_samples=a.effective_samples,
        n_blocks=a.n_blocks,
        block_span=a.block_span,
        total_energy=a.total_energy,
        captured_energy_fraction=a.captured_energy_fraction,
        noise_edge=a.noise_edge,
        suggested_n_modes=a.suggested_n_modes,
        modes=_mode_reports(a, context),
        groups=_group_reports(a),
        stationarity=Stationarity(
            startup_snapshots=a.startup_snapshots,
            startup_in_doubt=a.startup.in_doubt,
            drift_p_value=a.drift.p_value,
            drifting=a.drift.drifting,
            repeated_snapshots=context.repeated_snapshots,
        ),
        verdict=Verdict(
            state=a.look.state,
            reasons=[Reason(code=r.code, text=r.text) for r in a.look.reasons],
            settled_since=a.look.settled_since,
            snapshots_to_go=a.snapshots_to_go,
        ),
    )


def _mode_reports(a: Assessment, context: Context) -> list[ModeReport]:
    reports = []
    for index, (start, stop) in enumerate(a.groups):
        for k in range(start, stop):
            fraction = _fraction(float(a.eigenvalues[k]), a.total_energy)
            half = float(a.fraction_halfwidths[k])
            peak = context.peak_frequencies[k] if k < len(context.peak_frequencies) else None
            ref = context.reference
            reports.append(
                ModeReport(
                    mode=k + 1,
                    singular_value=float(np.sqrt(a.eigenvalues[k] * a.n_retained)),
                    energy=float(a.eigenvalues[k]),
                    energy_fraction=fraction,
                    energy_fraction_low=max(fraction - half, 0.0),
                    energy_fraction_high=min(fraction + half, 1.0),
                    group=index,
                    peak_frequency=peak,
                    strouhal=None if ref is None or peak is None else peak * ref.length / ref.speed,
                )
            )
    return reports


def _group_reports(a: Assessment) -> list[GroupReport]:
    return [
        GroupReport(
            modes=list(range(start + 1, stop + 1)),
            angle_deg=m.angle_deg,
            angle_bound_deg=m.bound_deg,
            truncation_angle_deg=m.truncation_deg,
            energy_halfwidth=half if np.isfinite(half) else None,
            settled=a.look.state == State.SETTLED,
        )
        for (start, stop), m, half in zip(a.groups, a.misalignments, a.group_halfwidths, strict=True)
    ]
