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
    For a part without structure the covariance of the probes is about (outside energy) times the identity. A
    single direction v of energy e adds e (Omega v)(Omega v)', an eigenvalue of about p e over that floor, with
    |Omega v|^2 spread like chi-square with p degrees of freedom.
    """
    n_probes = len(modal.outside)
    values = np.linalg.eigvalsh(modal.outside)
    floor = float(values[:-1].mean()) if n_probes > 1 else 0.0
    energy = max(float(values[-1]) - floor, 0.0) / max(n_probes, 1)
    wanted = modal.eigenvalues[: max(1, min(n_modes, modal.rank))]
    bound = energy * n_probes / float(chi2.ppf(1.0 - confidence, n_probes)) if n_probes else 0.0
    return Hidden(energy, bound, DANGEROUS_SHARE * float(wanted.min(initial=np.inf if len(wanted) else 0.0)))
