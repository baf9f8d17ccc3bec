"""Mode groups: neighbouring modes whose energies cannot be told apart by the record so far.

A travelling wave is a group of two for ever; only the span of a group is determined, never its members.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.stats import f as f_distribution

from streaming.modal import ModalMoments, score_variance, variance_freedom

Array = npt.NDArray[np.float64]
Group = tuple[int, int]  # index range [start, stop) of the modes, counted from 0

# Two modes count as separate when equal energies would give their gap in fewer than 1 % of records: a travelling
# wave that falls apart by chance at a look makes the verdict flicker, and a group kept too long costs nothing.
SEPARATION_LEVEL = 0.99


@dataclass(frozen=True)
class Grouping:
    """Groups among the leading modes, as far as they close.

    Attributes
    ----------
    groups : closed groups
    open_start : first mode of a group that does not close within the retained rank, or None
    statistics : (n,) F statistic of each gap, gap k between modes k and k + 1
    critical : value that F must exceed for a gap to count as separate
    """

    groups: tuple[Group, ...]
    open_start: int | None
    statistics: Array
    critical: float

    @property
    def separable(self) -> tuple[int, ...]:
        """Numbers of leading modes that end with a closed group."""
        return tuple(stop for _, stop in self.groups)


def gap_statistics(modal: ModalMoments, width: int) -> Array:
    """F statistic of each gap between neighbouring scored modes, (K - 1,), blocks joined ``width`` at a time.

    gap^2 / (2 s^2) with s^2 = (Var(C_ii - C_jj) + 4 Var(C_ij)) / 2; equal energies give F(2, 2 nu), since
    the gap of an equal pair is Rayleigh distributed, with nu the degrees of freedom of one variance.

    References
    ----------
    Anderson (1963), Ann. Math. Stat. 34, 122; North et al. (1982), Mon. Weather Rev. 110, 699, for the rule of
    thumb that this replaces: it calls an equal pair separate in most records.
    """
    k = np.arange(modal.n_scored - 1)
    scores = modal.scores
    difference = score_variance(scores[:, k, k] - scores[:, k + 1, k + 1], width)
    cross = score_variance(scores[:, k, k + 1], width)
    spread = difference + 4.0 * cross
    gap = modal.eigenvalues[k] - modal.eigenvalues[k + 1]
    floor = np.finfo(np.float64).tiny
    statistics: Array = np.where(gap > 0, gap**2 / np.maximum(spread, floor), 0.0)
    return statistics


def find_groups(modal: ModalMoments, n_modes: int, level: float = SEPARATION_LEVEL) -> Grouping:
    """Group the leading modes until the group that holds mode ``n_modes`` is closed, taken whole.

    In a record with fewer directions than the basis has room for, the last group closes at the last direction.
    """
    statistics = gap_statistics(modal, modal.width)
    critical = critical_value(modal.n_blocks, modal.width, level)
    groups: list[Group] = []
    start = 0
    for gap in range(len(statistics)):
        if statistics[gap] > critical:
            groups.append((start, gap + 1))
            start = gap + 1
            if start >= n_modes:
                return Grouping(tuple(groups), None, statistics, critical)
    if modal.complete and modal.n_scored == modal.rank:  # beyond the last mode there is nothing to tell it from
        return Grouping((*groups, (start, modal.rank)), None, statistics, critical)
    return Grouping(tuple(groups), start, statistics, critical)


def critical_value(n_blocks: int, width: int, level: float) -> float:
    """Value that the gap statistic of an equal pair exceeds with probability 1 - level."""
    freedom = variance_freedom(n_blocks, width)
    return float(f_distribution.ppf(level, 2, 2 * freedom))
