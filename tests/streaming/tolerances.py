"""All tolerances of the engine's tests, from eps of the dtype and what the algorithm promises."""

from __future__ import annotations

import numpy as np

from streaming.update import GRAM_CONDITION

VALUES = 1e-10  # relative, singular values in float64 when nothing is truncated
CLOSED_FORM = 1e-10
DISCRETE_SPECTRUM = 1e-12


def orthonormality(dtype: str) -> float:
    """Largest entry of U U' - 1 that the rule for trusting a Gram matrix allows."""
    return 2.0 * GRAM_CONDITION[dtype] * float(np.finfo(dtype).eps)
