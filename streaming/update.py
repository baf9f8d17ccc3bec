"""One block update of the basis, decided in the small space.

With the rows A = [U; Y] (r basis rows and n new snapshots, K = r + n in all) and D = diag(S, 1), the data seen
so far is D A up to what earlier updates dropped. Its SVD D A = X Sigma V' gives the new basis without an
orthonormal factor of A: V' = Sigma^-1 X' D A. X and Sigma come from the eigenvectors of D (A A') D, or, when
squaring would cost too many digits, from the SVD of D C with a triangular C C' = A A'.

The Gram matrix holds U U' as computed, so an orthonormality error of one update is seen and undone by the next.

References
----------
Brand (2006), Linear Algebra Appl. 415, 20-30; Sirovich (1987), Q. Appl. Math. 45, 561 (method of snapshots).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg import eigh, svd

Array = npt.NDArray[np.float64]

# Largest |y|^2 over smallest kept energy up to which a Gram matrix is trusted that was computed in the dtype of the
# rows: the relative error of the kept energies stays below this times eps. Beyond it the rows are looked at again.
GRAM_CONDITION = {"float32": 1e4, "float64": 1e4}

# A direction is rank deficient when its singular value is below this many eps of the largest.
DEFICIENT_EPS = 8.0


@dataclass(frozen=True)
class Update:
    """What one block does to the basis.

    Attributes
    ----------
    transform : (q, K) T; the new basis is T [U; Y]
    singular_values : (q,) descending
    carried : (q, r) coordinates of the old basis vectors in the new basis, by column
    coordinates : (n, q) coordinates of the new snapshots in the new basis, c = Y U_new'
    discarded_energy : sum of the squares of the singular values dropped in this update
    bend : orthonormality error of the new basis to be expected, in eps of the dtype of the rows
    """

    transform: Array
    singular_values: Array
    carried: Array
    coordinates: Array
    discarded_energy: float
    bend: float


def update_from_gram(singular_values: Array, gram: Array, max_rank: int, dtype: str, condition: float) -> Update | None:
    """Update from G = A A', or None when the energies to be kept do not stand clear of its round-off.

    Parameters
    ----------
    singular_values : (r,) S
    gram : (K, K) G
    max_rank : R
    dtype : name of the dtype of the rows
    condition : largest |y|^2 over smallest kept energy that G can serve, see `GRAM_CONDITION`; infinite for a Gram
        matrix to be taken as it is, whose basis is then made orthonormal by the caller

    Notes
    -----
    The error of G is about eps |y|^2 among the new snapshots; the part of the basis is graded by S, so that its
    errors stay relative to the energies they touch. The smallest energy that will be kept decides. A block
    without full rank never suffices: its smallest kept energy is round-off.
    """
    rank = len(singular_values)
    scale = np.concatenate([singular_values, np.ones(len(gram) - rank)])
    values, vectors = eigh(scale[:, None] * gram * scale)
    largest = float(np.max(np.diag(gram)[rank:], initial=0.0))
    smallest_kept = values[-min(max_rank, len(values))]
    spread = float(np.sqrt(len(gram) - rank)) * largest
    if spread > condition * smallest_kept:
        return None
    sigma = np.sqrt(np.maximum(values[::-1], 0.0))
    bend = spread / float(smallest_kept) if spread > 0 and math.isfinite(condition) else 0.0
    return _assemble(vectors[:, ::-1], sigma, scale, rank, max_rank, dtype, bend)


def update_from_factor(singular_values: Array, factor: Array, max_rank: int, dtype: str) -> Update:
    """Update from C, (K, K) with C C' = A A', found from the rows by QR; loses no digits by squaring."""
    scale = np.concatenate([singular_values, np.ones(len(factor) - len(singular_values))])
    left, sigma, _ = svd(scale[:, None] * factor)
    return _assemble(left, sigma, scale, len(singular_values), max_rank, dtype, 0.0)


def _assemble(left: Array, sigma: Array, scale: Array, rank: int, max_rank: int, dtype: str, bend: float) -> Update:
    floor = DEFICIENT_EPS * float(np.finfo(dtype).eps) * float(sigma[0])
    kept = min(max_rank, int(np.count_nonzero(sigma > floor)))
    x, s = left[:, :kept], sigma[:kept]
    dropped = sigma[kept:] ** 2
    return Update(
        transform=(x * scale[:, None]).T / s[:, None],
        singular_values=s,
        carried=(x[:rank] * s / scale[:rank, None]).T,
        coordinates=x[rank:] * s,
        discarded_energy=float(dropped.sum()),
        bend=bend,
    )
