"""Start-up and drift: the published rule on worked numbers, power, and the rate of false alarms."""

from __future__ import annotations

import numpy as np
import pytest

from streaming.modal import modal_moments
from streaming.stationarity import find_drift, find_startup, mser
from tests.streaming.direct_moments import autoregressive, moments_of

DEVIATIONS = np.array([3.0, 2.0, 1.5, 1.0, 0.5, 0.3])


def test_the_marginal_standard_error_rule_on_a_short_series() -> None:
    """White (1997); worked by hand from its formula: d = 5 leaves a mean of 2.000."""
    x = np.array([10, 6, 4, 3, 2.2, 1.9, 2.1, 2.0, 1.8, 2.1, 2.0, 1.9, 2.2, 2.0])
    assert mser(x) == 5
    assert x[5:].mean() == pytest.approx(2.0)


def test_the_rule_on_a_decaying_series_and_on_its_means_of_five() -> None:
    i = np.arange(100)
    y = 1 + 5 * 0.8**i + 0.1 * (-1.0) ** i
    assert mser(y) == 17
    means = y.reshape(20, 5).mean(axis=1)
    assert mser(means) == 5
    assert y[25:].mean() == pytest.approx(0.999926, abs=1e-6)


@pytest.mark.parametrize("what", ["mean", "variance"])
def test_a_start_up_is_left_out(what: str) -> None:
    rng = np.random.default_rng(1)
    rows = autoregressive(rng, 6400, DEVIATIONS, 0.7)
    decay = np.exp(-np.arange(6400) / 400.0)
    if what == "mean":
        rows[:, 0] += 30.0 * decay
    else:
        rows *= (1.0 + 6.0 * decay)[:, None]
    found = find_startup(moments_of(rows, 64), 3)
    assert not found.in_doubt
    assert 800 <= 100 * found.first_block <= 3200


@pytest.mark.parametrize("scale", [800.0, 3200.0])
def test_a_record_that_only_decays_is_drifting(scale: float) -> None:
    rng = np.random.default_rng(2)
    rows = autoregressive(rng, 6400, DEVIATIONS, 0.7) * np.exp(-np.arange(6400) / scale)[:, None]
    moments = moments_of(rows, 64)
    startup = find_startup(moments, 3)
    drift = find_drift(modal_moments(moments.since(startup.first_block), 6), 3)
    assert startup.in_doubt or drift.drifting


@pytest.mark.parametrize("keep", [0.0, 0.9, 0.98])
def test_false_alarms_are_rare(keep: float) -> None:
    """With 40 to 6400 independent samples in the record."""
    rng = np.random.default_rng(3)
    startups = drifts = 0
    for _ in range(100):
        moments = moments_of(autoregressive(rng, 3200, DEVIATIONS, keep), 32)
        startups += find_startup(moments, 3).first_block > 0
        drifts += find_drift(modal_moments(moments, 6), 3).drifting
    assert startups <= 4
    assert drifts <= 3


@pytest.mark.parametrize("change", ["mean", "energy", "shape"])
def test_a_change_half_way_is_drift(change: str) -> None:
    rng = np.random.default_rng(4)
    rows = autoregressive(rng, 6400, DEVIATIONS, 0.7)
    late = rows[3200:]
    if change == "mean":
        late[:, 1] += 2.0
    elif change == "energy":
        late *= 1.5
    else:
        late[:, :2] = late[:, :2] @ np.array([[0.8, 0.6], [-0.6, 0.8]])
    assert find_drift(modal_moments(moments_of(rows, 64), 6), 3).drifting


def test_few_blocks_say_nothing() -> None:
    rng = np.random.default_rng(5)
    moments = moments_of(rng.standard_normal((40, 6)), 4)
    assert find_startup(moments, 3).first_block == 0
    assert find_drift(modal_moments(moments, 6), 3).p_value is None


def test_a_sure_but_small_change_is_no_drift() -> None:
    """Two per cent more energy in the second half, with so many snapshots that it is beyond doubt."""
    rng = np.random.default_rng(6)
    rows = rng.standard_normal((64_000, 6)) * DEVIATIONS
    rows[32_000:] *= 1.01
    moments = moments_of(rows, 64)
    assert not find_drift(modal_moments(moments, 6), 3).drifting
    assert find_startup(moments, 3).first_block == 0
