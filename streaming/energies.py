"""Intervals of modal energies from the spread of the blocks."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.stats import t as student

from streaming.modal import ModalMoments, score_variance, variance_freedom

Array = npt.NDArray[np.float64]

_TINY = 1e-150  # of an energy; its square is still a normal number


def fraction_halfwidths(modal: ModalMoments, confidence: float) -> Array:
    """Half-width of each scored mode's share of the total energy, (K,), by the delta method.

    The share is a ratio of two means; block b adds (s_b,kk - share * t_b) / total to it, t_b the score of the
    total energy.
    """
    k = np.arange(modal.n_scored)
    total = max(modal.total_energy, _TINY)
    totals = modal.shares * (modal.block_energies - modal.block_energies @ modal.shares)
    scores = (modal.scores[:, k, k] - modal.eigenvalues[k] / total * totals[:, None]) / total
    halfwidths: Array = _quantile(modal, confidence) * np.sqrt(score_variance(scores, modal.width))
    return halfwidths


def group_halfwidth(modal: ModalMoments, group: tuple[int, int], confidence: float) -> float | None:
    """Half-width of the summed energy of a group, relative to it; None while there is a single block."""
    if modal.n_blocks < 2:
        return None
    k = np.arange(*group)
    spread = np.sqrt(score_variance(modal.scores[:, k, k].sum(axis=1), modal.width))
    return float(_quantile(modal, confidence) * spread / max(float(modal.eigenvalues[k].sum()), _TINY))


def _quantile(modal: ModalMoments, confidence: float) -> float:
    """Student's t with the degrees of freedom of a variance from overlapping blocks."""
    return float(student.ppf(0.5 + confidence / 2, variance_freedom(modal.n_blocks, modal.width)))
