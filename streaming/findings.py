"""The clauses of the criterion, each tested on the numbers of one evaluation."""

from __future__ import annotations

from typing import TYPE_CHECKING

from streaming.declaration import Criterion
from streaming.forecast import Need, angle_need
from streaming.groups import Grouping
from streaming.hidden import Hidden
from streaming.misalignment import Misalignment
from streaming.modal import ModalMoments
from streaming.report import State
from streaming.stationarity import Drift, Startup
from streaming.verdict import Finding

if TYPE_CHECKING:
    from streaming.assessment import Context

MIN_BLOCKS = 16
MIN_EFFECTIVE = 50.0


def failing_clauses(
    criterion: Criterion,
    modal: ModalMoments,
    startup: Startup,
    drift: Drift,
    grouping: Grouping,
    groups: tuple[tuple[int, int], ...],
    misalignments: tuple[Misalignment, ...],
    halfwidths: tuple[float, ...],
    hidden: Hidden,
    context: Context,
) -> list[Finding]:
    """Return every clause that keeps the run from being settled."""
    findings = []
    if modal.n_blocks < MIN_BLOCKS:
        findings.append(
            Finding(
                State.GATHERING, "few-blocks", f"{modal.n_blocks} blocks of time, {MIN_BLOCKS} are needed."
            )
        )
    effective = min((m.effective_samples for m in misalignments), default=0.0)
    if effective < MIN_EFFECTIVE:
        findings.append(
            Finding(
                State.GATHERING,
                "few-samples",
                f"The record is worth {effective:.0f} independent snapshots, {MIN_EFFECTIVE:.0f} are needed.",
            )
        )
    if startup.in_doubt:
        findings.append(
            Finding(
                State.DRIFTING,
                "start-up",
                "No end of the start-up was found in the first half of the record.",
            )
        )
    if drift.drifting:
        findings.append(
            Finding(State.DRIFTING, "drift", f"The halves of the record differ (p = {drift.p_value:.2g}).")
        )
    if context.repeated_snapshots > 0.01 * context.n_snapshots:
        findings.append(
            Finding(
                State.UNSETTLED,
                "repeated-snapshots",
                f"{context.repeated_snapshots} of {context.n_snapshots} snapshots repeat the one before.",
            )
        )
    if grouping.open_start is not None:
        able = grouping.separable[-1] if grouping.separable else 0
        findings.append(
            Finding(
                State.INSEPARABLE,
                "open-group",
                f"Mode {grouping.open_start + 1} and those after it up to the retained rank cannot be told apart; "
                f"{able} modes could be separated.",
            )
        )
    for (start, stop), m in zip(groups, misalignments, strict=True):
        if m.bound_deg > criterion.max_angle_deg:
            findings.append(
                Finding(
                    State.UNSETTLED,
                    "angle",
                    f"Modes {start + 1} to {stop}: misalignment bound {m.bound_deg:.1f} deg, tolerated "
                    f"{criterion.max_angle_deg:g} deg.",
                )
            )
    if hidden.dangerous:
        findings.append(
            Finding(
                State.UNSETTLED,
                "hidden-structure",
                f"A direction outside the basis may hold an energy of {hidden.energy_bound:.3g}, against "
                f"{modal.eigenvalues[min(criterion.n_modes, modal.rank) - 1]:.3g} of the last wanted mode; "
                "declare a larger retained_rank.",
            )
        )
    return findings


def needs(
    criterion: Criterion,
    modal: ModalMoments,
    grouping: Grouping,
    misalignments: tuple[Misalignment, ...],
    context: Context,
) -> list[Need]:
    """Record lengths, relative to the present one, that each clause asks for."""
    import math

    tolerance = math.sin(math.radians(criterion.max_angle_deg))
    out = [Need(1.0, 1.0, 1.0)]
    for m in misalignments:
        out.append(angle_need(m.sampling_bound, m.truncation, tolerance, m.freedom))
    return out
