"""The misalignment bound against closed forms, and its coverage where the truth is known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import subspace_angles
from scipy.stats import f as f_distribution
from sklearn.datasets import load_digits

from streaming.misalignment import misalignment, turning_scores, variance_plateau
from streaming.modal import modal_moments, score_variance, variance_freedom
from tests.streaming.direct_moments import autoregressive, moments_of

ENERGIES = np.array([8.0, 4.0, 2.0, 1.0, 0.5])


@pytest.mark.parametrize(
    ("group", "theory"),
    [((0, 1), 0.006697), ((1, 2), 0.011519), ((2, 3), 0.012222), ((4, 5), 0.006697), ((0, 2), 0.008216)],
)
def test_squared_sine_of_independent_snapshots(group: tuple[int, int], theory: float) -> None:
    """Sum of lambda_i lambda_j / (N (lambda_i - lambda_j)^2), Anderson (1963), at N = 400."""
    rng = np.random.default_rng(1)
    found, true = [], []
    for _ in range(150):
        modal = modal_moments(moments_of(rng.standard_normal((400, 5)) * np.sqrt(ENERGIES), 40), 5)
        found.append(float(score_variance(turning_scores(modal, group), modal.width).sum()))
        members = modal.rotation[:, slice(*group)]
        outside = np.delete(members, np.arange(*group), axis=0)
        true.append((outside**2).sum())
    assert np.mean(true) == pytest.approx(theory, rel=0.25)
    assert np.median(found) == pytest.approx(theory, rel=0.15)


def test_a_single_direction_has_the_f_quantile() -> None:
    """One mode against one other: V F(1, nu), methods of batch means."""
    rng = np.random.default_rng(2)
    modal = modal_moments(moments_of(rng.standard_normal((3200, 2)) * [2.0, 1.0], 32), 2)
    variance = float(score_variance(turning_scores(modal, (0, 1)), modal.width).sum())
    freedom = variance_freedom(32, modal.width)
    for confidence in (0.8, 0.95, 0.99):
        exact = np.sqrt(variance * f_distribution.ppf(confidence, 1, freedom))
        assert misalignment(modal, (0, 1), confidence).sampling_bound == pytest.approx(exact, rel=0.08)


def test_the_same_record_gives_the_same_bound() -> None:
    rng = np.random.default_rng(3)
    modal = modal_moments(moments_of(rng.standard_normal((640, 4)) * [3.0, 2.0, 1.0, 0.5], 32), 4)
    assert misalignment(modal, (0, 2), 0.95) == misalignment(modal, (0, 2), 0.95)


def test_the_bound_falls_like_the_root_of_the_record_length() -> None:
    rng = np.random.default_rng(4)
    means = []
    for n in (800, 12_800):
        records = [rng.standard_normal((n, 5)) * np.sqrt(ENERGIES) for _ in range(20)]
        modals = [modal_moments(moments_of(rows, 40), 5) for rows in records]
        means.append(np.mean([misalignment(modal, (0, 2), 0.95).sampling_bound for modal in modals]))
    assert means[0] / means[1] == pytest.approx(4.0, rel=0.2)


def test_oversampling_adds_no_samples() -> None:
    """AR(1) with lag-1 correlation r: products have n (1 - r^2) / (1 + r^2) independent samples (Bartlett 1946)."""
    rng = np.random.default_rng(5)
    keep, n, found = 0.9, 8000, []
    for _ in range(20):
        rows = autoregressive(rng, n, np.sqrt(ENERGIES), keep)
        found.append(misalignment(modal_moments(moments_of(rows, 40), 5), (0, 1), 0.95).effective_samples)
    assert np.mean(found) == pytest.approx(n * (1 - keep**2) / (1 + keep**2), rel=0.2)


@pytest.mark.campaign
def test_coverage_with_the_digits_as_the_population() -> None:
    """Records drawn from the 1797 images of `sklearn.datasets.load_digits`, whose modes are then the truth."""
    images = load_digits().data
    truth = np.linalg.svd(images - images.mean(axis=0), full_matrices=False)[2][:3].T
    rng = np.random.default_rng(6)
    held, ratios = 0, []
    for _ in range(120):
        drawn = images[rng.integers(0, len(images), 400)]
        modal = modal_moments(moments_of(drawn, 40, rank=24), 4, n_rows=64)
        bound = misalignment(modal, (0, 3), 0.95).bound
        true = float(np.sin(subspace_angles(truth, _basis(drawn, 24).T @ modal.rotation[:, :3]).max()))
        held += true <= bound
        ratios.append(bound / true)
    assert held / 120 >= 0.93
    assert np.median(ratios) < 2.5


def _basis(rows: np.ndarray, rank: int) -> np.ndarray:
    centred = rows - rows[: len(rows) // 40].mean(axis=0)
    basis: np.ndarray = np.linalg.svd(centred, full_matrices=False)[2][:rank]
    return basis


def test_blocks_shorter_than_the_memory_show() -> None:
    rng = np.random.default_rng(7)
    slow = autoregressive(rng, 1280, np.sqrt(ENERGIES), np.exp(-1.0 / 150.0))
    quick = autoregressive(rng, 12_800, np.sqrt(ENERGIES), 0.5)
    groups = ((0, 1), (1, 2))
    assert variance_plateau(modal_moments(moments_of(slow, 64), 5), groups) > 1.3
    assert variance_plateau(modal_moments(moments_of(quick, 64), 5), groups) < 1.2
