"""Structure that the basis has dropped, as the probes still see it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from streaming.modal import ModalMoments

# A dropped direction is a danger when its energy may reach this share of the last wanted mode's: it would then
# take part in the leading modes, or its place among them could change with a longer record.
DANGEROUS_SHARE = 0.5


@dataclass(frozen=True)
class Hidden:
    """Strongest single direction outside the basis: estimated energy, its upper bound, and the danger mark."""

    energy: float
    energy_bound: float
    limit: float

    @property
    def dangerous(self) -> bool:
        return self.energy_bound > self.limit


def hidden_structure(modal: ModalMoments, n_modes: int, confidence: float = 0.95) -> Hidden:
    """Estimate the largest energy of a direction outside the basis from the probes' covariance (p, p).

    Notes
    -----
    A part without structure in m' directions gives the probes a Marchenko-Pastur spectrum of ratio p / m' about
    the outside energy t: mean t, relative variance p / m', upper edge t (1 + (p / m')^(1/2))^2. A single direction v
    of energy e adds e (Omega v)(Omega v)', an eigenvalue p e with |Omega v|^2 spread like chi-square with p degrees
    of freedom. Mean and variance come from all eigenvalues but the largest.
    """
    n_probes = len(modal.outside)
    if n_probes < 3:
        return Hidden(0.0, 0.0, 0.0)
    values = np.linalg.eigvalsh(modal.outside)
    mean, variance = float(values[:-1].mean()), float(values[:-1].var())
    edge = (np.sqrt(mean) + np.sqrt(variance / mean)) ** 2 if mean > 0 else 0.0
    energy = max(float(values[-1]) - edge, 0.0) / n_probes
    wanted = modal.eigenvalues[: max(1, min(n_modes, modal.rank))]
    bound = energy * n_probes / float(chi2.ppf(1.0 - confidence, n_probes))
    least = float(wanted[-1]) if len(wanted) else 0.0  # data that never change have no modes
    return Hidden(energy, bound, DANGEROUS_SHARE * least)
