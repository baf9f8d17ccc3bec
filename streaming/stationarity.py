"""Start-up transient and drift, both from the block series of the ledger."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.stats import t as student

from streaming.modal import ModalMoments
from streaming.moments import Moments

Array = npt.NDArray[np.float64]

MIN_BLOCKS = 8  # fewer values per half give the tests nothing to go by
STARTUP_LEVEL = 0.001  # a stationary record loses blocks to the start-up test in about this share of looks
DRIFT_LEVEL = 0.005  # a false alarm only delays the verdict until a later look


@dataclass(frozen=True)
class Startup:
    """First block that belongs to the statistics, and whether the first half holds an end of the start-up."""

    first_block: int
    in_doubt: bool


@dataclass(frozen=True)
class Drift:
    """Half against half tests: the smallest p-value, corrected for their number, and the verdict on it."""

    p_value: float | None
    drifting: bool


def mser(series: Array) -> int:
    """Number of leading values to leave out by the marginal standard error rule.

    argmin over d of (n - d)^-2 sum_{i > d} (x_i - mean_{> d})^2.

    References
    ----------
    White (1997), Simulation 69, 323-334; White, Cobb & Spratt (2000), Proc. Winter Simulation Conf.
    """
    n = len(series)
    left = np.arange(n, 0, -1)  # values kept when d are left out, d = 0 .. n - 1
    tail_sum = np.cumsum(series[::-1])[::-1]
    tail_square = np.cumsum(((series - series.mean()) ** 2)[::-1])[::-1]
    offset = tail_sum / left - series.mean()
    statistic = (tail_square - left * offset**2) / left**2
    return int(np.argmin(statistic[: n - 1])) if n > 1 else 0


def find_startup(moments: Moments, n_modes: int) -> Startup:
    """Find the start-up on total energy, leading means and leading variances of the blocks."""
    if moments.n_blocks < MIN_BLOCKS:
        return Startup(0, False)
    series = _startup_series(moments, n_modes)
    first, in_doubt = 0, False
    for values in series.T:
        cut = mser(values)
        if cut and _differs(values, min(cut, len(values) // 2), STARTUP_LEVEL / series.shape[1]):
            in_doubt |= cut > len(values) // 2
            first = max(first, min(cut, len(values) // 2))
    return Startup(first, in_doubt)


def _startup_series(moments: Moments, n_modes: int) -> Array:
    """Block means of |y|^2 and of the leading coordinates, and the variances of these, (B, n)."""
    n = min(n_modes, moments.rank)
    variances = np.einsum("bii->bi", moments.scatters[:, :n, :n]) / moments.counts[:, None]
    return np.concatenate([moments.block_energies()[:, None], variances, moments.means[:, :n]], axis=1)


def _differs(values: Array, cut: int, level: float) -> bool:
    """Whether the first values lie outside what the second half of the series does."""
    reference = values[len(values) // 2 :]
    spread = float(reference.std(ddof=1))
    deviation = float(np.abs(values[:cut].mean() - reference.mean()))
    if spread == 0.0:
        return deviation > 0.0
    error = spread * np.sqrt(1.0 / cut + 1.0 / len(reference))
    return bool(2 * student.sf(deviation / error, len(reference) - 1) < level)


def find_drift(modal: ModalMoments, n_modes: int) -> Drift:
    """Compare the halves of the record: energy, leading means, variances and covariances."""
    if modal.n_blocks < 2 * MIN_BLOCKS:
        return Drift(None, False)
    n = min(n_modes, modal.n_scored)
    rows, columns = np.triu_indices(n)
    moments = modal.scores[:, rows, columns] / modal.shares[:, None]
    energies = modal.block_energies[:, None]
    series = np.concatenate([energies, modal.means[:, :n], moments], axis=1)
    series = series.reshape(len(series), -1)
    half = len(series) // 2
    p_values = half_against_half(series[:half], series[len(series) - half :])
    p_value = min(1.0, float(p_values.min()) * len(p_values))
    return Drift(p_value, p_value < DRIFT_LEVEL)


def half_against_half(first: Array, second: Array) -> Array:
    """Two-sided p-values of Welch's t on block values (b, n), their neighbours joined in pairs."""
    joined = [0.5 * (part[0 : len(part) // 2 * 2 : 2] + part[1 : len(part) // 2 * 2 : 2]) for part in (first, second)]
    errors = [part.var(axis=0, ddof=1) / len(part) for part in joined]
    spread = np.sqrt(errors[0] + errors[1])
    difference = np.abs(joined[0].mean(axis=0) - joined[1].mean(axis=0))
    freedom = max(len(joined[0]) - 1, 1)
    safe = np.where(spread > 0, spread, 1.0)
    statistic = np.where(spread > 0, difference / safe, np.where(difference > 0, np.inf, 0.0))
    p_values: Array = 2 * student.sf(statistic, freedom)
    return p_values
