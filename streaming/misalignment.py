"""Bound on the misalignment of a mode group from what the blocks of the record do to it.

To first order a change D of the covariance turns mode i towards mode j by D_ij / (lambda_i - lambda_j), and out of the
basis by D_if / (lambda_i - level). The block scores are such changes, so their sum with random signs and sizes has
the spread of the error that the record still holds, whatever the flow does inside a block.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq
from scipy.special import gammainc

from streaming.modal import ModalMoments, joined_scores, score_variance, variance_freedom

Array = npt.NDArray[np.float64]

N_DRAWS = 512  # of the multipliers; the 95 % quantile then has a relative standard error of about 1 %
_KEY = 20_011  # fixed, so that one record has one bound
LEAST_GAP = 0.25  # of an energy, to what was dropped; nearer than that a mode is as good as dropped itself
_TINY = 1e-150  # of an energy; its square is still a normal number

# The variance found with blocks twice as long may exceed the one used by this factor by chance (trials with known
# modes). What lies beyond is taken as memory longer than a block, and the bound is widened for it.
PLATEAU_ALLOWANCE = 1.15


@dataclass(frozen=True)
class Misalignment:
    """How far a group may be from what an endless record would give; angles as sines.

    Attributes
    ----------
    expected : root mean square of the sine of the largest principal angle
    sampling_bound : quantile of that sine at the stated confidence, from sampling alone
    truncation : sine of the truncation angle
    freedom : degrees of freedom of the variance behind the bound
    effective_samples : independent Gaussian snapshots that would leave the same misalignment
    """

    expected: float
    sampling_bound: float
    truncation: float
    freedom: float
    effective_samples: float

    @property
    def bound(self) -> float:
        """Sine of the bound: sampling and truncation together, by the triangle inequality."""
        return min(self.sampling_bound + self.truncation, 1.0)

    @property
    def angle_deg(self) -> float:
        return in_degrees(self.expected)

    @property
    def bound_deg(self) -> float:
        return in_degrees(self.bound)

    @property
    def truncation_deg(self) -> float:
        return in_degrees(self.truncation)


def in_degrees(sine: float) -> float:
    """Angle of a sine; first-order sines above 1 count as 90 degrees."""
    return float(np.degrees(np.arcsin(min(max(sine, 0.0), 1.0))))


def misalignment(modal: ModalMoments, group: tuple[int, int], confidence: float, plateau: float = 1.0) -> Misalignment:
    """Bound the misalignment of a group.

    Parameters
    ----------
    group : index range [start, stop) of its modes
    confidence : of the bound
    plateau : from `variance_plateau`; above its allowance it widens the bound

    Notes
    -----
    The rotation of the group is sum_b xi_b s_b with independent normal xi_b; the largest singular value of
    `N_DRAWS` such sums, each squared and multiplied by nu / chi2_nu for the sampling of the variance itself, gives
    the quantile. For one entry this is the F(1, nu) quantile of batch means. Widening: 2 V(2L) - V(L), the lugsail
    form, beyond the allowance.

    References
    ----------
    Anderson (1963), Ann. Math. Stat. 34, 122; Vats & Flegal (2022), Biometrika, lugsail (venue from memory).
    """
    truncation = truncation_sine(modal, group)
    if modal.n_blocks < 2:
        return Misalignment(1.0, 1.0, truncation, 1.0, 0.0)
    turning = turning_scores(modal, group)
    widening = max(1.0, 1.0 + 2.0 * (plateau - PLATEAU_ALLOWANCE))
    freedom = variance_freedom(modal.n_blocks, modal.width)
    squares = widening * _largest_squares(turning, modal.width)
    variance = widening * float(score_variance(turning, modal.width).sum())
    return Misalignment(
        expected=float(np.sqrt(squares.mean())),
        sampling_bound=float(np.sqrt(_quantile(squares, freedom, confidence))),
        truncation=truncation,
        freedom=freedom,
        effective_samples=_effective_samples(modal, group, variance),
    )


def turning_scores(modal: ModalMoments, group: tuple[int, int]) -> Array:
    """First-order rotation of a group by each block, (B, q, R - q + p); gaps inside the group cancel."""
    start, stop = group
    rows = modal.scores[:, start:stop]
    gaps, level = _gaps(modal, group)
    within = rows[:, :, _others(modal, group)] / gaps
    return np.concatenate([within, rows[:, :, modal.rank :] / level], axis=2)


def variance_plateau(modal: ModalMoments, groups: tuple[tuple[int, int], ...]) -> float:
    """Variance with blocks twice as long against the variance used, mean over the groups; about 1 on the plateau.

    References
    ----------
    Flyvbjerg & Petersen (1989), J. Chem. Phys. 91, 461: the variance must not grow with the block length.
    """
    width = modal.width
    if modal.n_blocks < 4 * width or not groups:
        return 1.0
    ratios = []
    for group in groups:
        turning = turning_scores(modal, group)
        short = float(score_variance(turning, width).sum())
        ratios.append(float(score_variance(turning, 2 * width).sum()) / short if short > 0 else 1.0)
    return float(np.mean(ratios))


def truncation_sine(modal: ModalMoments, group: tuple[int, int]) -> float:
    """Sine of the angle by which streaming has bent a group, seen by the probes.

    Largest singular value of the residuals (C_wc u_k - Omega U' C_cc u_k) / p^(1/2) of the group's modes, each over the
    gap to what was dropped; that lies between nothing and the energy of the last retained mode, so half of it is taken.
    """
    start, stop = group
    inside = np.maximum(modal.eigenvalues[start:stop, None], _TINY)
    gaps = np.maximum(inside - 0.5 * modal.eigenvalues[-1], LEAST_GAP * inside)
    return float(np.linalg.norm(modal.residuals[start:stop] / gaps, 2))


def _others(modal: ModalMoments, group: tuple[int, int]) -> npt.NDArray[np.int_]:
    others: npt.NDArray[np.int_] = np.r_[0 : group[0], group[1] : modal.rank]
    return others


def _gaps(modal: ModalMoments, group: tuple[int, int]) -> tuple[Array, Array]:
    """Gaps (q, R - q) to the modes outside the group and (q, 1) to what lies outside the basis; none is zero."""
    inside = modal.eigenvalues[group[0] : group[1], None]
    gaps = inside - modal.eigenvalues[_others(modal, group)]
    smallest = max(1e-12 * float(modal.eigenvalues.max(initial=0.0)), _TINY)
    return np.where(np.abs(gaps) < smallest, smallest, gaps), np.maximum(inside - modal.outside_level, smallest)


def _effective_samples(modal: ModalMoments, group: tuple[int, int], variance: float) -> float:
    """N times the squared rotation that N independent Gaussian snapshots would leave, over the one found.

    References
    ----------
    Anderson (1963): sum of lambda_i lambda_j / (N (lambda_i - lambda_j)^2).
    """
    gaps, level = _gaps(modal, group)
    inside = modal.eigenvalues[group[0] : group[1], None]
    independent = float((inside * modal.eigenvalues[_others(modal, group)] / gaps**2).sum())
    independent += float((inside * modal.outside_energy / level**2).sum())
    return min(float(modal.n_snapshots), independent / variance) if variance > 0 else float(modal.n_snapshots)


def _largest_squares(turning: Array, width: int) -> Array:
    """Squared largest singular value of each of `N_DRAWS` random sums of the scores."""
    joined = joined_scores(turning, width)
    n_blocks, n_joined = len(turning), len(joined)
    scale = n_blocks / (n_joined * width * (1.0 - width / n_blocks))
    multipliers: Array = np.random.Generator(np.random.Philox(_KEY)).standard_normal((N_DRAWS, n_joined))
    rotations: Array = (multipliers @ joined.reshape(n_joined, -1)).reshape(N_DRAWS, *joined.shape[1:])
    grams: Array = rotations @ rotations.transpose(0, 2, 1)
    squares: Array = scale * np.linalg.eigvalsh(grams)[:, -1].astype(np.float64)
    return squares


def _quantile(squares: Array, freedom: float, confidence: float) -> float:
    """Quantile of squares * freedom / chi2(freedom), each square equally likely."""
    largest = float(squares.max(initial=0.0))
    if largest <= 0.0:
        return 0.0

    def excess(logarithm: float) -> float:
        below = gammainc(freedom / 2.0, freedom / 2.0 * relative * np.exp(-logarithm))  # P(chi2 < nu square / value)
        return float(np.mean(below)) - (1.0 - confidence)

    relative = squares / largest
    return largest * float(np.exp(brentq(excess, -14.0, 21.0, xtol=1e-5)))
