"""Spectra and peaks against closed forms, with even and uneven times."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter

from streaming.spectra import peak_frequencies, spectrum, strouhal_number

TIMES = 0.02 * np.arange(4096)


def test_a_sine_has_its_variance_and_its_frequency() -> None:
    """Welch (1967), Hann windows: the density of a centred sine integrates to A^2 / 2."""
    series = 2.0 * np.sin(2 * np.pi * 3.125 * TIMES)[:, None]
    found = spectrum(TIMES, series)
    assert found is not None
    assert found.densities.sum() * found.frequencies[0] == pytest.approx(2.0, rel=1e-3)
    assert peak_frequencies(TIMES, series)[0] == pytest.approx(3.125, abs=1e-3)


def test_between_two_bins_and_in_noise() -> None:
    rng = np.random.default_rng(1)
    series = (np.sin(2 * np.pi * 3.31 * TIMES) + 2.0 * rng.standard_normal(4096))[:, None]
    found = spectrum(TIMES, series)
    assert found is not None
    assert peak_frequencies(TIMES, series)[0] == pytest.approx(3.31, abs=found.resolution / 2)


def test_white_noise_level_and_spread() -> None:
    """One-sided level 2 / fs; relative variance of a density 2 / freedom (Welch 1967)."""
    rng = np.random.default_rng(2)
    found = spectrum(TIMES, rng.standard_normal((4096, 40)))
    assert found is not None
    densities = found.densities[2:-2]
    assert densities.mean() == pytest.approx(2.0 / 50.0, rel=0.02)
    assert densities.var() / densities.mean() ** 2 == pytest.approx(2.0 / found.freedom, rel=0.1)


@pytest.mark.parametrize("keep", [0.0, 0.5, 0.9, 0.99])
def test_no_peak_is_found_where_there_is_none(keep: float) -> None:
    """White and red noise: a slope is no peak."""
    rng = np.random.default_rng(3)
    series = lfilter([1.0], [1.0, -keep], rng.standard_normal((4096, 60)), axis=0)
    assert sum(peak is not None for peak in peak_frequencies(TIMES, series)) <= 3


def test_uneven_times() -> None:
    rng = np.random.default_rng(4)
    kept = np.sort(rng.choice(4096, 1600, replace=False))
    series = np.stack([1.5 * np.cos(2 * np.pi * 1.37 * TIMES + 0.4), rng.standard_normal(4096)], axis=1)
    found = spectrum(TIMES[kept], series[kept])
    assert found is not None
    wave, noise = peak_frequencies(TIMES[kept], series[kept])
    assert wave == pytest.approx(1.37, abs=found.resolution / 2)
    assert noise is None


def test_too_short_a_record_has_no_spectrum() -> None:
    assert spectrum(TIMES[:63], TIMES[:63, None]) is None
    assert peak_frequencies(TIMES[:10], np.zeros((10, 3))) == (None, None, None)


def test_a_coefficient_that_stands_still_has_no_peak() -> None:
    assert peak_frequencies(TIMES, np.ones((4096, 1))) == (None,)


def test_strouhal_number() -> None:
    assert strouhal_number(20.0, 0.1, 10.0) == pytest.approx(0.2)
