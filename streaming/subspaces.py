"""Principal angles between the subspaces that two sets of modes span."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]
Float = npt.NDArray[np.floating]


def principal_angles_deg(pieces: Iterable[tuple[Float, Float, Float]]) -> Array:
    """Return the principal angles (n,), ascending, in degrees, between two sets of n modes.

    Parameters
    ----------
    pieces : (first (n, k), second (n, k), weights (k,)), the same rows of both sets, piece by piece
        The sets need not be orthonormal under the weights, but each must be of full rank.

    Notes
    -----
    With the Gram matrices A = F W F', B = S W S', C = F W S' the cosines are the singular values of
    chol(A)^-1 C chol(B)^-T. Angles below 1e-6 degrees are rounding. Only (2n, 2n) numbers are kept.

    References
    ----------
    Björck & Golub (1973), Math. Comp. 27, 579-594.

    Raises
    ------
    numpy.linalg.LinAlgError
        if a set is not of full rank
    """
    gram: Array | None = None
    n = 0
    for first, second, weights in pieces:
        n = len(first)
        rows = np.concatenate([first, second]).astype(np.float64)
        part = (rows * weights) @ rows.T
        gram = part if gram is None else gram + part
    if gram is None:
        raise ValueError("no rows to compare")
    left, right = np.linalg.cholesky(gram[:n, :n]), np.linalg.cholesky(gram[n:, n:])
    between = np.linalg.solve(left, np.linalg.solve(right, gram[n:, :n]).T)
    cosines = np.linalg.svd(between, compute_uv=False)
    angles: Array = np.degrees(np.arccos(np.clip(cosines, 0.0, 1.0)))
    return angles
