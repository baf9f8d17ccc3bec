"""Fixed random test vectors that see the part of the data which the basis has dropped."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

N_PROBES = 16  # p: the norm of a residual is then seen with a relative standard error of about 18 %
_KEY = 0x51AC4A7E  # any fixed number; the same probes for every run make a restart bitwise equal


def rademacher(n_rows: int, dtype: npt.DTypeLike) -> npt.NDArray[np.floating]:
    """Return the probes Omega, (N_PROBES, n_rows), entries +1 or -1, the same for every call.

    Notes
    -----
    E (omega' v)^2 = |v|^2 for each probe omega. The signs come from the raw bits of a counter-based
    generator, whose stream numpy guarantees, and not from a distribution, whose stream it does not.

    References
    ----------
    Hutchinson (1990), Commun. Stat. Simul. Comput. 19, 433-450 (from memory).
    """
    n_bytes = -(-n_rows // 4) * 8
    raw = np.random.Philox(key=_KEY).random_raw(n_bytes // 8).astype("<u8").view(np.uint8)
    signs = np.empty((N_PROBES, n_rows), dtype=dtype)
    pairs = raw[: 2 * n_rows].reshape(n_rows, 2)
    for k in range(N_PROBES):
        bit = (pairs[:, k // 8] >> (k % 8)) & 1
        np.multiply(bit, 2.0, out=signs[k], casting="unsafe")
    signs -= 1.0
    return signs
