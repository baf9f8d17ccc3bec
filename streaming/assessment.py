"""One evaluation of a run: from block moments to numbers and verdict, pure functions of the small space."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from streaming.declaration import Criterion
from streaming.energies import fraction_halfwidths
from streaming.evidence import Context, Evidence, gather
from streaming.findings import failing_clauses
from streaming.forecast import forecast
from streaming.moments import Moments
from streaming.noise import Noise, noise_level
from streaming.report import (
    Convergence,
    GroupReport,
    ModeReport,
    SnapshotsToGo,
    State,
    Stationarity,
    Verdict,
)
from streaming.verdict import Look, decide

__all__ = ["Assessment", "Context", "assess", "report"]

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Assessment:
    """All that one evaluation found.

    Attributes
    ----------
    evidence : what was measured
    fraction_halfwidths : (K,) half-width of each leading mode's share of the total energy
    startup_snapshots : snapshots left out at the start
    noise : noise edge and modes that stand clear of it, where it can be told
    criterion : what was asked for
    look : the verdict, and what the next look needs to know of this one
    """

    evidence: Evidence
    fraction_halfwidths: Array
    startup_snapshots: int
    noise: Noise | None
    criterion: Criterion
    look: Look
    snapshots_to_go: SnapshotsToGo | None

    @property
    def eigenvalues(self) -> Array:
        """(R,) energies of the modes, descending."""
        return self.evidence.modal.eigenvalues

    @property
    def mode_rotation(self) -> Array:
        """(R, R) orthogonal; column k is mode k + 1 in basis coordinates."""
        return self.evidence.modal.rotation

    @property
    def coordinate_mean(self) -> Array:
        """(R,) mean of the basis coordinates over the retained record."""
        return self.evidence.modal.mean

    @property
    def n_retained(self) -> int:
        """Snapshots behind the statistics, without the start-up."""
        return self.evidence.modal.n_snapshots


def assess(moments: Moments, criterion: Criterion, context: Context) -> Assessment:
    """Evaluate a run from its block moments.

    Between looks (``context.at_look`` false) the numbers are new and the verdict is that of the last look.
    """
    evidence = gather(moments, criterion, context.n_rows, context.settled_groups)
    if context.at_look or not context.previous:
        findings = failing_clauses(evidence, criterion, context)
        look = decide(findings, context.n_snapshots, evidence.groups, evidence.bound_sine, context.previous, criterion)
    else:
        look = context.previous[-1]
    settled = look.state == State.SETTLED
    return Assessment(
        evidence=evidence,
        fraction_halfwidths=fraction_halfwidths(evidence.modal, criterion.confidence),
        startup_snapshots=moments.n_snapshots - evidence.modal.n_snapshots,
        noise=noise_level(evidence.modal, context.n_rows),
        criterion=criterion,
        look=look,
        snapshots_to_go=None if settled else forecast(evidence, criterion, context, look),
    )


def report(assessment: Assessment, context: Context) -> Convergence:
    """Lay an assessment out as the public report."""
    evidence, modal = assessment.evidence, assessment.evidence.modal
    effective = evidence.effective_samples or None
    step = context.time_step
    return Convergence(
        n_snapshots=context.n_snapshots,
        waiting_snapshots=context.waiting_snapshots,
        time_span=context.time_span,
        startup_snapshots=assessment.startup_snapshots,
        integral_time=step * modal.n_snapshots / (2.0 * effective) if effective and step else None,
        effective_samples=effective,
        n_blocks=modal.n_blocks,
        block_span=evidence.block_span,
        total_energy=modal.total_energy,
        captured_energy_fraction=_share(modal.captured_energy, modal.total_energy),
        noise_edge=None if assessment.noise is None else assessment.noise.edge,
        suggested_n_modes=None if assessment.noise is None else assessment.noise.n_modes,
        modes=[
            _mode_report(assessment, context, k, index)
            for index, group in enumerate(evidence.groups)
            for k in range(*group)
        ],
        groups=[_group_report(assessment, context, index) for index in range(len(evidence.groups))],
        stationarity=Stationarity(
            startup_snapshots=assessment.startup_snapshots,
            startup_in_doubt=evidence.startup.in_doubt,
            drift_p_value=evidence.drift.p_value,
            drifting=evidence.drift.drifting,
            repeated_snapshots=context.repeated_snapshots,
        ),
        verdict=Verdict(
            state=assessment.look.state,
            reasons=list(assessment.look.reasons),
            settled_since=assessment.look.settled_since,
            snapshots_to_go=assessment.snapshots_to_go,
        ),
    )


def _mode_report(assessment: Assessment, context: Context, k: int, group: int) -> ModeReport:
    modal = assessment.evidence.modal
    energy = float(modal.eigenvalues[k])
    share = _share(energy, modal.total_energy)
    half = float(assessment.fraction_halfwidths[k])
    peak = context.motion.peaks[k] if k < len(context.motion.peaks) else None
    reference = context.reference
    return ModeReport(
        mode=k + 1,
        singular_value=float(np.sqrt(energy * modal.n_snapshots)),
        energy=energy,
        energy_fraction=share,
        energy_fraction_low=max(share - half, 0.0),
        energy_fraction_high=min(share + half, 1.0),
        group=group,
        peak_frequency=peak,
        strouhal=None if reference is None or peak is None else peak * reference.length / reference.speed,
    )


def _group_report(assessment: Assessment, context: Context, index: int) -> GroupReport:
    evidence = assessment.evidence
    start, stop = evidence.groups[index]
    found = evidence.misalignments[index]
    return GroupReport(
        modes=list(range(start + 1, stop + 1)),
        angle_deg=found.angle_deg,
        angle_bound_deg=found.bound_deg,
        truncation_angle_deg=found.truncation_deg,
        energy_halfwidth=evidence.halfwidths[index],
        settled=found.bound_deg <= assessment.criterion.max_angle_deg,
        travelling=context.motion.pair_in((start, stop)),
    )


def _share(part: float, whole: float) -> float:
    return min(part / whole, 1.0) if whole > 0 else 0.0
