"""Everything that one evaluation measures, before anything is decided."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from streaming.declaration import Criterion, Reference
from streaming.energies import group_halfwidth
from streaming.groups import Group, Grouping, find_groups
from streaming.hidden import Hidden, hidden_structure
from streaming.misalignment import Misalignment, misalignment, variance_plateau
from streaming.modal import ModalMoments, modal_moments
from streaming.moments import Moments
from streaming.motion import Motion
from streaming.report import State
from streaming.stationarity import Drift, Startup, find_drift, find_startup
from streaming.verdict import Look

SPARE_MODES = 8  # scored beyond the wanted ones at first; a group that reaches further doubles the number


@dataclass(frozen=True)
class Context:
    """What the stream knows beside the block moments.

    Attributes
    ----------
    n_snapshots : snapshots in the basis
    block_length : L
    waiting_snapshots : absorbed, not yet a full block
    n_rows : m, rows of a snapshot; with it the noise edge is known
    time_step : mean time between snapshots, in the unit of the run
    time_span : time from the first to the last snapshot in the basis
    repeated_snapshots : snapshots equal to their predecessor in every row
    previous : earlier looks, oldest first
    at_look : whether this evaluation may change the verdict
    reference : makes frequencies Strouhal numbers
    motion : peak frequencies and travelling pairs, as of the last look
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
    motion: Motion = field(default_factory=Motion)

    @property
    def settled_groups(self) -> tuple[Group, ...] | None:
        """Groups that the last look called settled, or None."""
        last = self.previous[-1] if self.previous else None
        return last.groups if last is not None and last.groups and last.state == State.SETTLED else None


@dataclass(frozen=True)
class Evidence:
    """The measurements of one evaluation.

    Attributes
    ----------
    modal : moments of the retained record in modal coordinates
    grouping : closed groups, and the start of one that does not close
    groups : groups that hold the wanted modes
    misalignments : one per group
    halfwidths : relative half-width of each group's energy; None while a single block says nothing of it
    plateau : variance with longer blocks against the variance used
    block_span : snapshots per block of the ledger
    """

    modal: ModalMoments
    grouping: Grouping
    groups: tuple[Group, ...]
    misalignments: tuple[Misalignment, ...]
    halfwidths: tuple[float | None, ...]
    plateau: float
    startup: Startup
    drift: Drift
    hidden: Hidden
    block_span: int

    @property
    def effective_samples(self) -> float:
        """Independent samples behind the worst-known wanted group."""
        return min((m.effective_samples for m in self.misalignments), default=0.0)

    @property
    def bound_sine(self) -> float:
        """Largest bound of the wanted groups."""
        return max((m.bound for m in self.misalignments), default=1.0)


def gather(
    moments: Moments, criterion: Criterion, n_rows: int | None, settled_groups: tuple[Group, ...] | None = None
) -> Evidence:
    """Measure everything that the verdict rests on.

    Groups that have settled stay as they were judged: the span is what was promised, and that a longer record can
    take it apart does not make it less well known.
    """
    startup = Startup(0, False) if criterion.startup == "keep" else find_startup(moments, criterion.n_modes)
    kept = moments.since(startup.first_block)
    if settled_groups is None:
        modal, grouping = _grouped(kept, criterion.n_modes, n_rows)
    else:
        modal = modal_moments(kept, settled_groups[-1][1] + SPARE_MODES, n_rows)
        grouping = replace(find_groups(modal, criterion.n_modes), groups=settled_groups, open_start=None)
    groups = wanted_groups(grouping, criterion.n_modes, modal.n_scored)
    plateau = variance_plateau(modal, groups)
    return Evidence(
        modal=modal,
        grouping=grouping,
        groups=groups,
        misalignments=tuple(misalignment(modal, g, criterion.confidence, plateau) for g in groups),
        halfwidths=tuple(group_halfwidth(modal, g, criterion.confidence) for g in groups),
        plateau=plateau,
        startup=startup,
        drift=find_drift(modal, criterion.n_modes),
        hidden=hidden_structure(modal, criterion.n_modes),
        block_span=int(moments.counts[0]),
    )


def _grouped(moments: Moments, n_modes: int, n_rows: int | None) -> tuple[ModalMoments, Grouping]:
    """Score as many modes as it takes to close the group of the last wanted mode."""
    n_leading = n_modes + SPARE_MODES
    while True:
        modal = modal_moments(moments, n_leading, n_rows)
        grouping = find_groups(modal, n_modes)
        if grouping.open_start is None or modal.n_scored == modal.rank:
            return modal, grouping
        n_leading *= 2


def wanted_groups(grouping: Grouping, n_modes: int, n_scored: int) -> tuple[Group, ...]:
    """Groups that hold the wanted modes; one that does not close is taken up to the last wanted mode."""
    if n_scored == 0:  # data that never changed have no modes
        return ()
    if grouping.open_start is None or grouping.open_start >= n_scored:
        return grouping.groups
    stop = max(grouping.open_start + 1, min(n_modes, n_scored))
    return (*grouping.groups, (grouping.open_start, stop))
