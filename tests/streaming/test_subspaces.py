"""Principal angles against scipy and against a rotation of known angle."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import subspace_angles

from streaming.subspaces import principal_angles_deg


def test_agrees_with_scipy_however_the_rows_are_cut() -> None:
    rng = np.random.default_rng(5)
    first, second = rng.standard_normal((2, 4, 90))
    weights = rng.uniform(0.1, 3.0, 90)
    root = np.sqrt(weights)
    expected = np.degrees(np.sort(subspace_angles((first * root).T, (second * root).T)))
    pieces = [(first[:, cut], second[:, cut], weights[cut]) for cut in (slice(0, 17), slice(17, 64), slice(64, 90))]
    np.testing.assert_allclose(principal_angles_deg(pieces), expected, atol=1e-9)


def test_a_pair_turned_by_a_known_angle() -> None:
    """(e1, e2) against (e2, cos e1 + sin e3): one common direction, and the turn (closed form)."""
    turn = np.radians(25.0)
    first = np.eye(4)[:2]
    second = np.stack([np.eye(4)[1], np.cos(turn) * np.eye(4)[0] + np.sin(turn) * np.eye(4)[2]])
    np.testing.assert_allclose(principal_angles_deg([(first, second, np.ones(4))]), [0.0, 25.0], atol=1e-6)


def test_sets_of_lower_rank_are_refused() -> None:
    rows = np.ones((2, 9))
    with pytest.raises(np.linalg.LinAlgError):
        principal_angles_deg([(rows, rows, np.ones(9))])
