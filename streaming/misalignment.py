"""Bound on the misalignment of a mode group from what the blocks of the record do to it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq
from scipy.stats import chi2

from streaming.modal import ModalMoments, joined_scores, score_variance

Array = npt.NDArray[np.float64]

N_DRAWS = 512  # of the multipliers; the 95 % quantile then has a relative standard error of about 1 %
_SEED = 20_011  # fixed, so that one record has one bound


@dataclass(frozen=True)
class Misalignment:
    """How far a group may be from what an endless record would give; all as sines.

    Attributes
    ----------
    expected : root mean square of the sine of the largest principal angle
    sampling_bound : quantile of that sine at the stated confidence, sampling alone
    truncation : sine of the truncation angle
    freedom : degrees of freedom of the variance behind the bound
    plateau : E(2 L) / E(L), variance with blocks twice as long against the variance used
    effective_samples : independent Gaussian snapshots that would leave the same misalignment
    """

    expected: float
    sampling_bound: float
    truncation: float
    freedom: float
    plateau: float
    effective_samples: float

    @property
    def angle_deg(self) -> float:
        return _degrees(self.expected)

    @property
    def bound_deg(self) -> float:
        return _degrees(self.sampling_bound + self.truncation)

    @property
    def truncation_deg(self) -> float:
        return _degrees(self.truncation)


def _degrees(sine: float) -> float:
    return float(np.degrees(np.arcsin(min(max(sine, 0.0), 1.0))))


def turning_scores(modal: ModalMoments, group: tuple[int, int]) -> Array:
    """First-order rotation of a group by each block, (B, q, R - q + p).

    Rows s_b,ij / (lambda_i - lambda_j) for i in the group and j outside it, and s_b,if / lambda_i for the part
    outside the basis. Gaps inside the group cancel.
    """
    start, stop = group
    inside = modal.eigenvalues[start:stop, None]
    others = np.r_[0:start, stop : modal.rank]
    gaps = inside - modal.eigenvalues[others]
    gaps = np.where(gaps == 0.0, np.finfo(np.float64).tiny, gaps)
    rows = modal.scores[:, start:stop]
    within = rows[:, :, others] / gaps
    beyond = rows[:, :, modal.rank :] / np.maximum(inside, np.finfo(np.float64).tiny)
    return np.concatenate([within, beyond], axis=2)


def independent_variance(modal: ModalMoments, group: tuple[int, int]) -> float:
    """Sum of squared rotations that N independent Gaussian snapshots would leave.

    References
    ----------
    Anderson (1963), Ann. Math. Stat. 34, 122.
    """
    start, stop = group
    inside = modal.eigenvalues[start:stop, None]
    others = np.r_[0:start, stop : modal.rank]
    gaps = inside - modal.eigenvalues[others]
    gaps = np.where(gaps == 0.0, np.finfo(np.float64).tiny, gaps)
    within = inside * modal.eigenvalues[others] / gaps**2
    beyond = modal.outside_energy / np.maximum(inside, np.finfo(np.float64).tiny)
    return float((within.sum() + beyond.sum()) / modal.n_snapshots)


def truncation_sine(modal: ModalMoments, group: tuple[int, int]) -> float:
    """Sine of the angle by which streaming has bent a group, seen by the probes."""
    start, stop = group
    inside = np.maximum(modal.eigenvalues[start:stop, None], np.finfo(np.float64).tiny)
    return float(np.linalg.norm(modal.residuals[start:stop] / inside, 2))


def misalignment(
    modal: ModalMoments, group: tuple[int, int], confidence: float, width: int = 1
) -> Misalignment:
    """Bound the misalignment of a group with blocks joined ``width`` at a time."""
    if modal.n_blocks < 2:
        return Misalignment(1.0, 1.0, truncation_sine(modal, group), 1.0, 1.0, 0.0)
    turning = turning_scores(modal, group)
    variance = float(score_variance(turning, width).sum())
    longer = float(score_variance(turning, 2 * width).sum()) if modal.n_blocks > 4 * width else variance
    plateau = longer / variance if variance > 0 else 1.0
    inflation = max(1.0, 2.0 * plateau - 1.0)
    freedom = _freedom(turning, width)
    quantile, mean_square = _largest_sine(turning, width, freedom, confidence)
    return Misalignment(
        expected=float(np.sqrt(inflation * mean_square)),
        sampling_bound=float(np.sqrt(inflation * quantile)),
        truncation=truncation_sine(modal, group),
        freedom=freedom,
        plateau=plateau,
        effective_samples=_effective(modal, group, inflation * variance),
    )


def _effective(modal: ModalMoments, group: tuple[int, int], variance: float) -> float:
    n = float(modal.n_snapshots)
    return min(n, n * independent_variance(modal, group) / variance) if variance > 0 else n


def _freedom(turning: Array, width: int) -> float:
    return max(len(turning) - 1.0, 1.0) if width == 1 else max(1.5 * (len(turning) / width - 1.0), 1.0)


def _largest_sine(turning: Array, width: int, freedom: float, confidence: float) -> tuple[float, float]:
    """Quantile and mean of the squared largest singular value of the group's rotation."""
    joined = joined_scores(turning, width)
    n_blocks = len(turning)
    scale = n_blocks / (len(joined) * width * (1.0 - width / n_blocks)) if n_blocks > width else 1.0
    signs = np.random.Generator(np.random.Philox(_SEED)).standard_normal((N_DRAWS, len(joined)))
    rotations = np.tensordot(signs, joined, axes=(1, 0))
    grams = rotations @ rotations.transpose(0, 2, 1)
    squares = scale * np.linalg.eigvalsh(grams)[:, -1]
    return _quantile(squares, freedom, confidence), float(squares.mean())


def _quantile(squares: Array, freedom: float, confidence: float) -> float:
    """Quantile of squares * freedom / chi2(freedom), the draws being equally likely."""
    largest = float(squares.max(initial=0.0))
    if largest <= 0.0:
        return 0.0

    def excess(value: float) -> float:
        return float(chi2.cdf(freedom * squares / value, freedom).mean()) - (1.0 - confidence)

    return float(brentq(excess, 1e-6 * largest, 1e6 * largest, rtol=1e-6))
