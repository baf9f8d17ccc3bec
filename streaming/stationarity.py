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
STARTUP_LEVEL = 0.001  # chance that a stationary record loses its first blocks at a look; they are lost for little
RELEVANT_CHANGE = 0.05  # of an energy, or of a standard deviation; a smaller change may be sure and does not matter
ROUND_OFF = 1e-9  # of the largest value of a series; smaller differences are arithmetic, not flow
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

    argmin over d <= 3 n / 4 of (n - d)^-2 sum_{i > d} (x_i - mean_{> d})^2; beyond, a few last values that lie
    close together by chance would win.

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
    return int(np.argmin(statistic[: 3 * n // 4 + 1])) if n > 1 else 0


def find_startup(moments: Moments, n_modes: int) -> Startup:
    """Find the start-up on total energy, leading means and leading variances of the blocks.

    The rule of `mser` proposes a cut for each series; it is made where the part before it differs from the second
    half of the record by more than chance, so that a stationary record is left whole.
    """
    series = _startup_series(moments.whole_blocks(), n_modes)
    n_blocks, n_series = series.shape
    if n_blocks < MIN_BLOCKS:
        return Startup(0, False)
    first, in_doubt = 0, False
    for values in series.T:
        cut, half = mser(values), n_blocks // 2
        within = min(cut, half)
        change = abs(float(values[:within].mean() - values[half:].mean())) if cut else 0.0
        if change > RELEVANT_CHANGE and p_value_of_start(values, within) < STARTUP_LEVEL / n_series:
            late = values[half:cut].mean() - values[cut:].mean() if cut > half else 0.0
            in_doubt |= abs(float(late)) > RELEVANT_CHANGE
            first = max(first, within)
    return Startup(first, in_doubt)


def _startup_series(moments: Moments, n_modes: int) -> Array:
    """Logarithms of block energies and leading variances, and leading means, (B, n); logarithms for their skew."""
    n = min(n_modes, moments.rank)
    variances = np.einsum("bii->bi", moments.scatters[:, :n, :n]) / moments.counts[:, None]
    positive = np.concatenate([moments.block_energies()[:, None], variances], axis=1)
    means = moments.means[:, :n] - moments.means[:, :n].mean(axis=0)
    return np.concatenate([_logarithm(positive), _relative(means, variances.mean(axis=0))], axis=1)


def p_value_of_start(values: Array, cut: int) -> float:
    """Two-sided p-value of the first ``cut`` values against the second half of the series (b,), by Student's t.

    The correlation of neighbours, taken from the second half, makes both means less certain.
    """
    reference = values[len(values) // 2 :]
    spread = float(reference.std(ddof=1))
    deviation = abs(float(values[:cut].mean() - reference.mean()))
    if spread <= ROUND_OFF * float(np.abs(values).max()):
        return 0.0 if deviation > ROUND_OFF * float(np.abs(values).max()) else 1.0
    memory = _memory(reference)
    error = spread * np.sqrt(memory * (1.0 / cut + 1.0 / len(reference)))
    return float(2.0 * student.sf(deviation / error, max(len(reference) / memory - 1.0, 1.0)))


def _memory(values: Array) -> float:
    """(1 + r) / (1 - r) with r the correlation of neighbours: values per independent one of an AR(1) series.

    References
    ----------
    Bayley & Hammersley (1946), J. R. Stat. Soc. Suppl. 8, 184 (from memory).
    """
    offsets = values - values.mean()
    correlation = float(offsets[1:] @ offsets[:-1]) / float(offsets @ offsets)
    bounded = min(max(correlation, 0.0), 0.9)
    return (1.0 + bounded) / (1.0 - bounded)


def find_drift(modal: ModalMoments, n_modes: int) -> Drift:
    """Compare the halves of the record in energy, leading means and leading (co)variances; p is corrected for all."""
    if modal.n_blocks < 2 * MIN_BLOCKS:
        return Drift(None, False)
    series = _drift_series(modal, min(n_modes, modal.n_scored))
    if 2 * modal.shares[-1] < modal.shares[0]:  # a short last block would weigh as much as the others
        series = series[:-1]
    half = len(series) // 2
    p_values = half_against_half(series[:half], series[len(series) - half :])
    p_value = min(1.0, float(p_values.min()) * len(p_values))
    return Drift(p_value, p_value < DRIFT_LEVEL)


def _drift_series(modal: ModalMoments, n: int) -> Array:
    """Block values (B, k) of what should be the same in both halves; energies by their logarithm for their skew."""
    second = modal.scores[:, :n, :n] / modal.shares[:, None, None]
    variances = np.einsum("bii->bi", second) + modal.eigenvalues[:n]
    rows, columns = np.triu_indices(n, 1)
    positive = np.concatenate([modal.block_energies[:, None], variances], axis=1)
    energies = modal.eigenvalues[:n]
    means = _relative(modal.means[:, :n], energies)
    shears = _relative(second[:, rows, columns], energies[rows] * energies[columns])
    return np.concatenate([_logarithm(positive), means, shears], axis=1)


def _logarithm(positive: Array) -> Array:
    """Logarithm of block energies (B, n), with a floor for blocks of nothing."""
    floor = np.maximum(1e-12 * positive.max(axis=0, initial=0.0), np.finfo(np.float64).tiny)
    logarithm: Array = np.log(np.maximum(positive, floor))
    return logarithm


def _relative(values: Array, variances: Array) -> Array:
    """Values (B, n) in standard deviations; zero where nothing varies."""
    deviations = np.sqrt(variances)
    relative: Array = np.divide(values, deviations, out=np.zeros_like(values), where=deviations > 0)
    return relative


def half_against_half(first: Array, second: Array) -> Array:
    """Two-sided p-values of Welch's t on block values (b, n), their neighbours joined in pairs; 1 for small changes."""
    joined = [0.5 * (part[0 : len(part) // 2 * 2 : 2] + part[1 : len(part) // 2 * 2 : 2]) for part in (first, second)]
    errors = [part.var(axis=0, ddof=1) / len(part) for part in joined]
    spread = np.sqrt(errors[0] + errors[1])
    difference = np.abs(joined[0].mean(axis=0) - joined[1].mean(axis=0))
    freedom = max(len(joined[0]) - 1, 1)
    floor = ROUND_OFF * np.maximum(np.abs(first).max(axis=0), np.abs(second).max(axis=0))
    safe = np.maximum(spread, np.maximum(floor, np.finfo(np.float64).tiny))
    p_values: Array = np.where(difference > RELEVANT_CHANGE, 2.0 * student.sf(difference / safe, freedom), 1.0)
    return p_values
