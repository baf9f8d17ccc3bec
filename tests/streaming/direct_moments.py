"""Block moments straight from data, without a stream: nothing truncated, so that only the statistics are tested."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from streaming.moments import Moments
from streaming.probes import rademacher

Array = npt.NDArray[np.float64]


def moments_of(snapshots: Array, n_blocks: int, rank: int | None = None) -> Moments:
    """Moments of (N, m) in ``n_blocks`` equal blocks, in the basis of the leading ``rank`` directions (all rows)."""
    n, m = snapshots.shape
    assert n % n_blocks == 0
    y = snapshots - snapshots[: n // n_blocks].mean(axis=0)
    basis = np.eye(m) if rank is None else np.linalg.svd(y, full_matrices=False)[2][:rank]
    probes = rademacher(m, np.float64).astype(np.float64)
    z = np.concatenate([y @ basis.T, y @ probes.T], axis=1).reshape(n_blocks, n // n_blocks, -1)
    means = z.mean(axis=1)
    centred = z - means[:, None]
    starts = np.arange(0, n, n // n_blocks, dtype=np.float64)
    return Moments(
        counts=np.full(n_blocks, float(n // n_blocks)),
        means=means,
        scatters=centred.transpose(0, 2, 1) @ centred,
        energies=(y**2).sum(axis=1).reshape(n_blocks, -1).sum(axis=1),
        times=np.stack([starts, starts + n // n_blocks - 1], axis=1),
        rank=len(basis),
        probes_basis=probes @ basis.T,
        mean_energy=float((y.mean(axis=0) ** 2).sum()),
    )


def autoregressive(rng: np.random.Generator, n: int, deviations: Array, keep: float) -> Array:
    """Independent AR(1) series with the given standard deviations, (n, k), lag-1 correlation ``keep``."""
    forcing = np.sqrt(1.0 - keep**2) * rng.standard_normal((n, len(deviations)))
    out = np.empty_like(forcing)
    state = rng.standard_normal(len(deviations))
    for i in range(n):
        state = keep * state + forcing[i]
        out[i] = state
    return out * deviations
