"""Noise edge and the number of modes that stand clear of white noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from streaming.modal import ModalMoments


@dataclass(frozen=True)
class Noise:
    """What white noise of the energy left outside the basis would do to the modes.

    Attributes
    ----------
    edge : largest energy that pure noise gives a mode
    n_modes : modes above the threshold of least error in the reconstruction
    """

    edge: float
    n_modes: int


def noise_level(modal: ModalMoments, n_rows: int | None) -> Noise | None:
    """Estimate the noise from the energy outside the basis, or None when nothing lies outside.

    Notes
    -----
    sigma^2 = (energy outside) / (m - R). The edge is that of Marchenko & Pastur, sigma^2 (1 + (m / N)^(1/2))^2; the
    threshold on singular values is lambda(beta) sigma times the root of the longer side, with

        lambda(beta)^2 = 2 (beta + 1) + 8 beta / (beta + 1 + (beta^2 + 14 beta + 1)^(1/2)),  beta = short / long side.

    The median of the singular values, the usual yardstick, is not among the R kept ones. Weights, and noise with a
    memory, make real noise other than white: take both numbers as a hint.

    References
    ----------
    Marchenko & Pastur (1967), Math. USSR Sb. 1, 457 (from memory); Gavish & Donoho (2014), IEEE Trans. Inf.
    Theory 60, 5040-5053.
    """
    if n_rows is None or n_rows <= modal.rank or modal.outside_energy <= 0.0:
        return None
    variance = modal.outside_energy / (n_rows - modal.rank)
    n = modal.n_snapshots
    edge = variance * (1.0 + np.sqrt(n_rows / n)) ** 2
    threshold = hard_threshold(min(n_rows, n) / max(n_rows, n)) ** 2 * variance * max(n_rows, n) / n
    return Noise(float(edge), int(np.count_nonzero(modal.eigenvalues > threshold)))


def hard_threshold(aspect: float) -> float:
    """lambda(beta) of Gavish & Donoho (2014), eq. 11 (number from memory), for known noise; aspect 0 < beta <= 1."""
    root = np.sqrt(aspect**2 + 14.0 * aspect + 1.0)
    return float(np.sqrt(2.0 * (aspect + 1.0) + 8.0 * aspect / (aspect + 1.0 + root)))
