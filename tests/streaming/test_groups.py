"""Mode groups: size and power of the gap test, and its values on the El Nino series."""

from __future__ import annotations

import numpy as np
import pytest
from statsmodels.datasets import elnino

from streaming.groups import critical_value, find_groups, gap_statistics
from streaming.modal import ModalMoments, modal_moments
from tests.streaming.direct_moments import moments_of


def modal_of(snapshots: np.ndarray, n_blocks: int) -> ModalMoments:
    moments = moments_of(snapshots, n_blocks)
    return modal_moments(moments, moments.rank)


def test_values_on_the_sea_surface_temperatures() -> None:
    """Windows of 24 months of `statsmodels.datasets.elnino`: an annual pair that stays one group.

    F values of the gaps 1-2, 2-3 and 3-4 computed apart from this project with plain numpy.
    """
    table = elnino.load_pandas().data
    months = table.drop(columns="YEAR").to_numpy(dtype=np.float64).ravel()
    windows = np.lib.stride_tricks.sliding_window_view(months, 24)[:708]
    modal = modal_of(windows, 12)
    np.testing.assert_allclose(gap_statistics(modal, 1)[:3], [1.4449, 81.04, 2.2964], rtol=2e-3)
    assert critical_value(12, 1, 0.95) == pytest.approx(3.4434, abs=1e-4)
    assert find_groups(modal, 2).groups[0] == (0, 2)


@pytest.mark.parametrize("n_blocks", [16, 32, 60])
def test_an_equal_pair_is_seldom_separated(n_blocks: int) -> None:
    """Equal energies: 5 % of records separate them; the gap above its standard error alone does so in 78 %.

    The latter is exp(-1/4) for the Rayleigh distributed gap (derived from Anderson 1963).
    """
    rng = np.random.default_rng(3)
    separated, beyond_north = 0, 0
    for _ in range(300):
        modal = modal_of(rng.standard_normal((40 * n_blocks, 3)) * [2.0, 2.0, 0.5], n_blocks)
        separated += find_groups(modal, 1).groups[0] == (0, 1)
        first, second = modal.eigenvalues[:2]
        beyond_north += first - second > first * np.sqrt(2.0 / (40 * n_blocks))
    assert separated / 300 < 0.09
    assert 0.70 < beyond_north / 300 < 0.86


def test_different_energies_are_separated() -> None:
    rng = np.random.default_rng(4)
    modal = modal_of(rng.standard_normal((6400, 4)) * [2.0, 1.7, 1.0, 0.5], 32)
    assert find_groups(modal, 3).groups == ((0, 1), (1, 2), (2, 3))


def test_the_group_of_the_last_wanted_mode_is_taken_whole() -> None:
    rng = np.random.default_rng(5)
    modal = modal_of(rng.standard_normal((6400, 5)) * [3.0, 1.5, 1.5, 0.7, 0.3], 32)
    found = find_groups(modal, 2)
    assert found.groups == ((0, 1), (1, 3))
    assert found.open_start is None


def test_a_group_that_does_not_close_says_where_it_begins() -> None:
    rng = np.random.default_rng(6)
    modal = modal_of(rng.standard_normal((6400, 6)) * [3.0, 2.0, 1.0, 1.0, 1.0, 1.0], 32)
    found = find_groups(modal, 4)
    assert found.open_start == 2
    assert found.separable == (1, 2)


def test_a_record_of_four_directions_closes_at_the_fourth() -> None:
    """Two travelling waves and nothing else: two pairs, whatever number of modes was asked for."""
    t, x = np.arange(3200)[:, None], 2.0 * np.pi * np.arange(40) / 40
    rows = np.cos(3 * x - 0.37 * t) + 0.5 * np.cos(5 * x - 0.91 * t)
    moments = moments_of(rows, 32, rank=4)
    for n_modes in (3, 4, 6):
        found = find_groups(modal_moments(moments, 4, 40), n_modes)
        assert (found.groups, found.open_start) == (((0, 2), (2, 4)), None)
