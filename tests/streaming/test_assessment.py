"""One evaluation as a whole: its numbers against direct ones, degenerate records, and its time."""

from __future__ import annotations

import time

import numpy as np
import pytest
from threadpoolctl import threadpool_limits

from streaming.assessment import Context, assess, report
from streaming.declaration import Criterion, Reference
from streaming.energies import fraction_halfwidths, group_halfwidth
from streaming.modal import modal_moments
from streaming.motion import Motion
from streaming.noise import hard_threshold, noise_level
from streaming.report import State
from tests.streaming.direct_moments import moments_of


def rows_of(n: int, seed: int = 0, m: int = 12) -> np.ndarray:
    out: np.ndarray = np.random.default_rng(seed).standard_normal((n, m)) * 0.7 ** np.arange(m) + 3.0
    return out


def test_energies_are_those_of_the_batch_decomposition() -> None:
    rows = rows_of(1280)
    criterion = Criterion(n_modes=3)
    context = Context(n_snapshots=1280, block_length=20, n_rows=12, time_step=0.1)
    said = report(assess(moments_of(rows, 64), criterion, context), context)
    values = np.linalg.svd(rows - rows.mean(axis=0), compute_uv=False)
    np.testing.assert_allclose([mode.singular_value for mode in said.modes], values[: len(said.modes)], rtol=1e-10)
    assert said.total_energy == pytest.approx((values**2).sum() / 1280)
    assert said.captured_energy_fraction == pytest.approx(1.0)
    assert said.effective_samples is not None
    assert said.integral_time == pytest.approx(0.1 * 1280 / (2 * said.effective_samples))


def test_intervals_hold_the_true_energy_share() -> None:
    energies = 0.49 ** np.arange(12)
    held = 0
    for seed in range(200):
        modal = modal_moments(moments_of(rows_of(1280, seed), 32), 4)
        half = fraction_halfwidths(modal, 0.95)[0]
        held += abs(modal.eigenvalues[0] / modal.total_energy - energies[0] / energies.sum()) <= half
    assert 0.91 <= held / 200 <= 0.985


def test_the_halfwidth_of_a_group() -> None:
    """Variance 2 lambda^2 / N of the energy of independent Gaussian snapshots (Anderson 1963)."""
    modal = modal_moments(moments_of(rows_of(6400), 32), 4)
    assert group_halfwidth(modal, (0, 1), 0.95) == pytest.approx(2.0 * np.sqrt(2.0 / 6400), rel=0.4)


@pytest.mark.parametrize(("aspect", "threshold"), [(0.05, 1.506607), (0.5, 1.978599), (1.0, 4.0 / np.sqrt(3.0))])
def test_the_hard_threshold(aspect: float, threshold: float) -> None:
    """Gavish & Donoho (2014): 4 / sqrt(3) for a square matrix; the others from their formula for known noise."""
    assert hard_threshold(aspect) == pytest.approx(threshold, abs=1e-6)


def test_noise_edge_and_number_of_modes() -> None:
    """White noise of variance 0.25 in 100 rows, three strong directions; edge of Marchenko & Pastur (1967)."""
    rng = np.random.default_rng(5)
    rows = 0.5 * rng.standard_normal((1600, 100))
    rows[:, :3] += rng.standard_normal((1600, 3)) * [5.0, 4.0, 3.0]
    found = noise_level(modal_moments(moments_of(rows, 32, rank=12), 12), 100)
    assert found is not None
    assert found.n_modes == 3
    assert found.edge == pytest.approx(0.25 * (1.0 + np.sqrt(100 / 1600)) ** 2, rel=0.05)


@pytest.mark.parametrize(
    "rows",
    [
        pytest.param(np.zeros((320, 6)), id="all zero"),
        pytest.param(np.ones((320, 6)), id="constant"),
        pytest.param(np.outer(np.sin(np.arange(320)), np.ones(6)), id="one direction"),
        pytest.param(1e-12 * rows_of(320, m=6), id="tiny"),
        pytest.param(1e12 * rows_of(320, m=6), id="huge"),
    ],
)
@pytest.mark.parametrize("n_blocks", [1, 2, 8, 32])
def test_degenerate_records_give_finite_numbers(rows: np.ndarray, n_blocks: int) -> None:
    context = Context(n_snapshots=320, block_length=10, n_rows=6)
    said = report(assess(moments_of(rows, n_blocks), Criterion(n_modes=3), context), context)
    assert said.verdict.state != State.SETTLED
    assert "nan" not in said.model_dump_json().lower()
    assert all(0.0 <= group.angle_bound_deg <= 90.0 for group in said.groups)


def test_peaks_become_strouhal_numbers() -> None:
    reference = Reference(length=0.1, speed=10.0)
    context = Context(1280, 20, reference=reference, motion=Motion(peaks=(20.0, None)))
    said = report(assess(moments_of(rows_of(1280), 32), Criterion(n_modes=2), context), context)
    assert said.modes[0].strouhal == pytest.approx(0.2)
    assert said.modes[1].strouhal is None


def test_one_evaluation_takes_under_fifty_milliseconds() -> None:
    """Rank 40, 64 blocks, one thread: processor time, best of several, so that a busy machine does not fail it."""
    moments = moments_of(np.random.default_rng(6).standard_normal((6400, 60)) * 0.9 ** np.arange(60), 64, rank=40)
    criterion, context = Criterion(n_modes=6), Context(n_snapshots=6400, block_length=80, n_rows=60)
    taken = []
    with threadpool_limits(1):
        for _ in range(12):
            start = time.process_time()
            assess(moments, criterion, context)
            taken.append(time.process_time() - start)
    assert min(taken) < 0.05
