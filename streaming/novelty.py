"""Novelty: how far each new snapshot lies from what the basis and its leading modes have learnt so far.

Two numbers for each snapshot, taken before the snapshot is learnt itself: the energy outside the basis, and the squared
Hotelling distance within the leading modes. Each comes with a limit that a snapshot of the same regime exceeds with
probability `ALARM_LEVEL`, so that a stall, a valve that opened or a dead tap shows within one block.

References
----------
Jackson & Mudholkar (1979), Technometrics 21, 341-349: control of residuals of principal components. Their limit
needs the dropped eigenvalues, which a stream does not keep; the first two moments of past residuals stand in for
them, as in Box (1954), Ann. Math. Stat. 25, 290-302 (both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt
from scipy.stats import chi2
from scipy.stats import f as f_distribution

Array = npt.NDArray[np.float64]

ALARM_LEVEL = 0.001
MEMORY_BLOCKS = 16  # of the residual's moments: the basis improves, so old residuals say little of new ones
MIN_BLOCKS = 4  # until then there is no limit
COLUMNS = ("outside", "outside_limit", "hotelling", "hotelling_limit")


@dataclass(frozen=True)
class Watch:
    """What new snapshots are compared with; everything in the present basis.

    Attributes
    ----------
    modes : (n, r) leading modes in basis coordinates
    mean : (r,) mean coordinates
    energies : (n,) of these modes
    n_samples : effective number of snapshots behind them
    blocks : blocks behind the moments of the residual, up to `MEMORY_BLOCKS`
    residual_mean, residual_square : moments of the energy outside the basis
    """

    modes: Array = field(default_factory=lambda: np.zeros((0, 0)))
    mean: Array = field(default_factory=lambda: np.zeros(0))
    energies: Array = field(default_factory=lambda: np.zeros(0))
    n_samples: float = 0.0
    blocks: int = 0
    residual_mean: float = 0.0
    residual_square: float = 0.0

    def set(self, modes: Array, mean: Array, energies: Array, n_samples: float) -> Watch:
        """Return the watch with newly assessed modes."""
        return replace(self, modes=modes, mean=mean, energies=energies, n_samples=n_samples)

    def carried(self, carried: Array) -> Watch:
        """Return the same in a new basis; ``carried`` (q, r) maps old coordinates to new ones."""
        if len(self.mean) == 0:
            return self
        return replace(self, modes=self.modes @ carried.T, mean=carried @ self.mean)

    def judge(self, coordinates: Array, energies: Array) -> Array:
        """Return the columns `COLUMNS` for new snapshots: c (n, r) and |y|^2 (n,); NaN where nothing is known yet."""
        rows = np.full((len(energies), len(COLUMNS)), np.nan)
        rows[:, 0] = np.maximum(energies - (coordinates**2).sum(axis=1), 0.0)
        rows[:, 1] = self._outside_limit()
        positive = self.energies > 0
        if positive.any():
            amplitudes = (coordinates - self.mean) @ self.modes[positive].T
            rows[:, 2] = (amplitudes**2 / self.energies[positive]).sum(axis=1)
            rows[:, 3] = self._hotelling_limit(int(positive.sum()))
        return rows

    def learnt(self, outside: Array) -> Watch:
        """Return the watch with the residuals (n,) of one more block in its moments.

        Residuals beyond the limit count as the limit: an alarm must not teach the limit to be silent.
        """
        limit = self._outside_limit()
        tame = outside if np.isnan(limit) else np.minimum(outside, limit)
        blocks = min(self.blocks + 1, MEMORY_BLOCKS)
        share = 1.0 / blocks
        return replace(
            self,
            blocks=blocks,
            residual_mean=(1 - share) * self.residual_mean + share * float(tame.mean()),
            residual_square=(1 - share) * self.residual_square + share * float((tame**2).mean()),
        )

    def _outside_limit(self) -> float:
        """Upper limit g chi2(h) with the mean and the variance of past residuals."""
        variance = self.residual_square - self.residual_mean**2
        if self.blocks < MIN_BLOCKS or variance <= 0.0:
            return float("nan")
        scale = variance / (2.0 * self.residual_mean)
        return scale * float(chi2.isf(ALARM_LEVEL, self.residual_mean / scale))

    def _hotelling_limit(self, n_modes: int) -> float:
        """Limit of the squared distance of a new sample from a mean and covariance known from n samples."""
        n = self.n_samples
        if n_modes == 0 or n <= n_modes + 1:
            return float("nan")
        factor = n_modes * (n * n - 1.0) / (n * (n - n_modes))
        return factor * float(f_distribution.isf(ALARM_LEVEL, n_modes, n - n_modes))

    def export(self) -> dict[str, Array]:
        """Return the state as arrays."""
        numbers = [self.n_samples, self.blocks, self.residual_mean, self.residual_square]
        return {"modes": self.modes, "mean": self.mean, "energies": self.energies, "numbers": np.array(numbers)}

    @staticmethod
    def of(state: dict[str, Array]) -> Watch:
        """Return the watch that `export` described."""
        n_samples, blocks, mean, square = (float(v) for v in state["numbers"])
        return Watch(state["modes"], state["mean"], state["energies"], n_samples, int(blocks), mean, square)
