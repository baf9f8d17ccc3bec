"""The truncation angle against the true angle between streamed modes and those of the batch SVD."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import subspace_angles, svd

from tests.streaming.conftest import MakeStream

FACTOR = 1.5  # 16 probes see a norm with a standard error of 18 %


def travelling(noise: float) -> np.ndarray:
    """Three travelling pairs with wandering phases, in white noise, (2000, 200)."""
    rng = np.random.default_rng(1)
    x = np.arange(200) / 200
    out = noise * rng.standard_normal((2000, 200))
    for k in (1, 2, 3):
        phase = np.cumsum(rng.normal(0.4 * k, 0.1, 2000))[:, None]
        out = out + 1.5**-k * np.cos(2 * np.pi * k * x - phase)
    return out


def autoregressive(memory: float, decay: float) -> np.ndarray:
    """60 fixed structures with amplitudes decay^k and AR(1) coefficients, (2000, 300)."""
    rng = np.random.default_rng(2)
    structures, _ = np.linalg.qr(rng.standard_normal((300, 60)))
    forcing = rng.standard_normal((2000, 60)) * np.sqrt(1 - memory**2)
    state = rng.standard_normal(60)
    rows = np.empty((2000, 60))
    for k in range(2000):
        state = memory * state + forcing[k] if k else state
        rows[k] = state
    out: np.ndarray = (rows * decay ** np.arange(60)) @ structures.T
    return out


def mirrored(snapshots: np.ndarray) -> np.ndarray:
    """Each snapshot followed by its negative: every block, and so the datum, has the mean zero exactly."""
    return np.stack([snapshots, -snapshots], axis=1).reshape(-1, snapshots.shape[1])


@pytest.mark.parametrize(
    ("snapshots", "rank", "n_modes"),
    [
        pytest.param(travelling(0.05), 10, 4, id="pairs in weak noise"),
        pytest.param(travelling(0.2), 10, 4, id="pairs in noise"),
        pytest.param(travelling(0.5), 10, 4, id="pairs in strong noise"),
        pytest.param(travelling(1.0), 10, 4, id="pairs near the noise floor"),
        pytest.param(mirrored(autoregressive(0.0, 0.9)), 12, 2, id="datum at the mean"),
        pytest.param(autoregressive(0.0, 0.9), 12, 2, id="independent, slow decay"),
        pytest.param(autoregressive(0.99, 0.9), 12, 2, id="long memory"),
        pytest.param(autoregressive(0.9, 0.8), 12, 2, id="fast decay"),
        pytest.param(autoregressive(0.5, 0.85), 16, 2, id="short memory"),
        pytest.param(autoregressive(0.95, 0.95), 20, 2, id="very slow decay"),
    ],
)
def test_within_a_factor_of_the_true_angle(
    make_stream: MakeStream, snapshots: np.ndarray, rank: int, n_modes: int
) -> None:
    stream = make_stream(snapshots.shape[1], retained_rank=rank, criterion={"n_modes": n_modes, "startup": "keep"})
    stream.absorb(snapshots)
    stream.close()
    _, _, right = svd(snapshots - snapshots.mean(axis=0), full_matrices=False)
    modes = stream.modes()[:, 0]
    for group in stream.convergence().groups:
        members = np.array(group.modes) - 1
        true = float(np.degrees(subspace_angles(modes[members].T, right[members].T).max()))
        assert np.radians(1e-4) < np.radians(true) < 0.12
        assert 1 / FACTOR < group.truncation_angle_deg / true < FACTOR
