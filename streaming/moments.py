"""Block moments of the small space: all that the statistics of a run are computed from.

Each snapshot leaves z = (c; w): c = U y, its R coordinates in the basis, and w = Omega y, what the p fixed
probes see of it. A `Moments` holds sums of z over consecutive blocks of time, in the current basis.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Moments:
    """Moments of B consecutive blocks of time; everything float64, y relative to the datum.

    Attributes
    ----------
    counts : (B,) snapshots in each block
    means : (B, R + p) mean of z over the block
    scatters : (B, R + p, R + p) sum of (z - block mean)(z - block mean)' over the block; about block means,
        since moments about the origin lose all digits when the mean is large
    energies : (B,) sum of |y|^2 over the block (exact, whatever was truncated)
    times : (B, 2) time of the first and of the last snapshot of the block
    rank : R, number of leading entries of z that are basis coordinates
    probes_basis : (p, R) Omega U', the probes' view of the basis vectors
    mean_energy : |y_mean|^2 over the whole record (exact), for the total energy about the mean
    unseen : (p, R) exact covariance of w with U y, less the one in these moments: what truncation has hidden from them,
        or None when nothing can have been hidden
    """

    counts: Array
    means: Array
    scatters: Array
    energies: Array
    times: Array
    rank: int
    probes_basis: Array
    mean_energy: float
    unseen: Array | None = None

    @property
    def n_blocks(self) -> int:
        return len(self.counts)

    @property
    def n_probes(self) -> int:
        return int(self.means.shape[1]) - self.rank

    @property
    def n_snapshots(self) -> int:
        return int(self.counts.sum())

    def since(self, first: int) -> Moments:
        """Leave out the blocks before ``first``. ``mean_energy`` then is an estimate, see `window_mean_energy`."""
        if first == 0:
            return self
        kept = Moments(
            self.counts[first:],
            self.means[first:],
            self.scatters[first:],
            self.energies[first:],
            self.times[first:],
            self.rank,
            self.probes_basis,
            0.0,
        )
        share = kept.n_snapshots / self.n_snapshots  # all that was hidden is laid to the blocks that are kept
        unseen = None if self.unseen is None else self.unseen / share
        return Moments(**{**kept.__dict__, "mean_energy": kept.window_mean_energy(), "unseen": unseen})

    def with_unseen(self, unseen: Array) -> Moments:
        """Return the same with what truncation has hidden, (p, R)."""
        return Moments(**{**self.__dict__, "unseen": unseen})

    def whole_blocks(self) -> Moments:
        """Leave out a last block that holds less than half of the others, too short to compare with them."""
        if self.n_blocks < 2 or 2 * self.counts[-1] >= self.counts[0]:
            return self
        kept = {name: getattr(self, name)[:-1] for name in ("counts", "means", "scatters", "energies", "times")}
        return Moments(**{**self.__dict__, **kept})

    def window_mean_energy(self) -> float:
        """|mean of y|^2 over these blocks: the part in the basis, and the probes' estimate of the rest."""
        mean = self.counts @ self.means / self.counts.sum()
        inside, seen = mean[: self.rank], mean[self.rank :]
        outside = seen - self.probes_basis @ inside
        return float(inside @ inside + outside @ outside / max(self.n_probes, 1))

    def mean(self) -> Array:
        """Mean of z over all blocks, (R + p,)."""
        mean: Array = self.counts @ self.means / self.counts.sum()
        return mean

    def block_energies(self) -> Array:
        """Mean of |y - mean|^2 over each block, (B,), about the mean of all blocks.

        The datum is the mean of the first block alone; energies about it would swing with the flow. The part of
        the mean that lies outside the basis is left out.
        """
        mean = self.mean()[: self.rank]
        energies: Array = self.energies / self.counts - 2.0 * (self.means[:, : self.rank] @ mean) + mean @ mean
        return energies

    def covariance(self) -> Array:
        """Covariance of z over all blocks (divisor N), (R + p, R + p)."""
        offsets = self.means - self.mean()
        between = np.einsum("b,bi,bj->ij", self.counts, offsets, offsets, optimize=True)
        total: Array = (self.scatters.sum(axis=0) + between) / self.counts.sum()
        return total

    def joined(self, factor: int) -> Moments:
        """Join ``factor`` neighbours at a time; a short rest at the end stays a block of its own."""
        if factor == 1:
            return self
        starts = np.arange(0, self.n_blocks, factor)
        counts = np.add.reduceat(self.counts, starts)
        means = np.add.reduceat(self.counts[:, None] * self.means, starts) / counts[:, None]
        offsets = self.means - np.repeat(means, np.diff(np.append(starts, self.n_blocks)), axis=0)
        between = self.counts[:, None, None] * offsets[:, :, None] * offsets[:, None, :]
        scatters = np.add.reduceat(self.scatters + between, starts)
        ends = np.append(starts[1:], self.n_blocks) - 1
        times = np.stack([self.times[starts, 0], self.times[ends, 1]], axis=1)
        return Moments(
            counts,
            means,
            scatters,
            np.add.reduceat(self.energies, starts),
            times,
            self.rank,
            self.probes_basis,
            self.mean_energy,
            self.unseen,
        )
