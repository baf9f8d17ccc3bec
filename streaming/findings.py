"""The clauses of the criterion, each tested on the numbers of one evaluation."""

from __future__ import annotations

import math
from collections.abc import Iterator

from streaming.declaration import Criterion
from streaming.evidence import Context, Evidence
from streaming.groups import Group
from streaming.report import State
from streaming.verdict import ANGLE, Finding

MIN_BLOCKS = 16  # fewer leave the variances with so few degrees of freedom that bounds mean little

# Independent samples below which first-order bounds on angles fall short of their confidence.
MIN_EFFECTIVE_SAMPLES = 100

# Variance with longer blocks against the variance used; beyond, a block is shorter than the memory of the flow. It
# matters when the bound would pass the tolerance after two more such steps; in periodic flow, where no bound
# stands near it, the ratio means nothing.
MAX_PLATEAU = 1.5

# A bound wavers from look to look by its own sampling error. Settled modes count as unsettled again only when it
# passes the tolerance by this factor; the first settled verdict, on which a run is stopped, has no slack.
REOPENING = 1.25

# Share of repeated snapshots that a restart may leave behind; more, and the source has stood still.
MAX_REPEATED_FRACTION = 0.01


def failing_clauses(evidence: Evidence, criterion: Criterion, context: Context) -> tuple[Finding, ...]:
    """Return every clause that keeps the run from being settled."""
    return (
        *_gathering(evidence, criterion, context),
        *_drifting(evidence),
        *_repeating(context),
        *_inseparable(evidence, criterion),
        *_loose(evidence, criterion, context),
        *_hidden(evidence, criterion),
    )


def _gathering(evidence: Evidence, criterion: Criterion, context: Context) -> Iterator[Finding]:
    n_blocks, effective = evidence.modal.n_blocks, evidence.effective_samples
    if n_blocks < MIN_BLOCKS:
        text = f"The record holds {n_blocks} blocks of time so far; {MIN_BLOCKS} are the least to judge from."
        yield Finding(State.GATHERING, "few-blocks", text)
    elif effective < MIN_EFFECTIVE_SAMPLES:
        text = (
            f"The {evidence.modal.n_snapshots} snapshots are worth {effective:.0f} independent ones; "
            f"{MIN_EFFECTIVE_SAMPLES} are the least to judge from. Taking them closer together adds nothing."
        )
        yield Finding(State.GATHERING, "few-samples", text)
    elif evidence.plateau > MAX_PLATEAU and evidence.bound_sine * evidence.plateau > _tolerance(criterion):
        text = (
            f"Blocks of {evidence.block_span} snapshots are shorter than the memory of the flow: the variance "
            f"still grows by a factor of {evidence.plateau:.2f} when they are joined."
        )
        yield Finding(State.GATHERING, "long-memory", text)
    if criterion.min_duration is not None and context.time_span < criterion.min_duration:
        text = f"The record spans {context.time_span:.6g} of the min_duration {criterion.min_duration:.6g}."
        yield Finding(State.GATHERING, "min-duration", text)


def _drifting(evidence: Evidence) -> Iterator[Finding]:
    if evidence.startup.in_doubt:
        text = (
            "The start of the record differs from the rest, and the start-up reaches beyond the first half; go on "
            "until it is a small part of the record."
        )
        yield Finding(State.DRIFTING, "start-up", text)
    if evidence.drift.drifting:
        text = (
            f"The halves of the record differ in energy, mean or shape (p = {evidence.drift.p_value:.1g}): the flow "
            "is still developing, or changed on the way."
        )
        yield Finding(State.DRIFTING, "drift", text)


def _repeating(context: Context) -> Iterator[Finding]:
    repeated, n = context.repeated_snapshots, max(context.n_snapshots, 1)
    if repeated > MAX_REPEATED_FRACTION * n:
        text = (
            f"{repeated} of {n} snapshots equal the one before in every row: the source stands still or repeats "
            "its output. Repeats look like perfect convergence, so nothing is judged from them."
        )
        yield Finding(State.UNSETTLED, "repeated-snapshots", text)


def _inseparable(evidence: Evidence, criterion: Criterion) -> Iterator[Finding]:
    start = evidence.grouping.open_start
    if start is None:
        return
    able = [n for n in evidence.grouping.separable if n <= criterion.n_modes]
    hint = f"With n_modes = {able[-1]} it could be judged now" if able else "No leading mode stands clear now"
    rank = evidence.modal.rank
    text = (
        f"Mode {min(criterion.n_modes, rank)} belongs to a group that begins at mode {start + 1} and does not close "
        f"within the {rank} retained ones: their energies cannot be told apart yet. {hint}; "
        "otherwise go on, or declare a larger retained_rank."
    )
    yield Finding(State.INSEPARABLE, "open-group", text)


def _loose(evidence: Evidence, criterion: Criterion, context: Context) -> Iterator[Finding]:
    limit = criterion.max_energy_halfwidth
    slack = 1.0 if context.settled_groups is None else REOPENING
    for group, m, half in zip(evidence.groups, evidence.misalignments, evidence.halfwidths, strict=True):
        if m.bound_deg > slack * criterion.max_angle_deg:
            text = (
                f"{group_name(group)}: misalignment at most {m.bound_deg:.1f} deg at "
                f"{100 * criterion.confidence:g} % confidence, tolerated {criterion.max_angle_deg:g} deg."
            )
            yield Finding(State.UNSETTLED, ANGLE, text)
        if limit is not None and (half is None or half > limit):
            known = "not known yet" if half is None else f"known to +- {100 * half:.1f} %"
            text = f"{group_name(group)}: energy {known}, tolerated +- {100 * limit:g} %."
            yield Finding(State.UNSETTLED, "energy", text)


def _hidden(evidence: Evidence, criterion: Criterion) -> Iterator[Finding]:
    hidden = evidence.hidden
    if hidden.dangerous:
        text = (
            f"A direction that the basis has dropped may hold an energy of {hidden.energy_bound:.3g}, more than "
            f"{hidden.limit:.3g}, half of that of mode {min(criterion.n_modes, evidence.modal.rank)}; it may "
            "belong among the wanted modes. Declare a larger retained_rank."
        )
        yield Finding(State.UNSETTLED, "hidden-structure", text)


def _tolerance(criterion: Criterion) -> float:
    return math.sin(math.radians(criterion.max_angle_deg))


def group_name(group: Group) -> str:
    """Name of a group in sentences; modes count from 1."""
    start, stop = group
    return f"Mode {stop}" if stop == start + 1 else f"Modes {start + 1} to {stop}"
