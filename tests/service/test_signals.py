"""Spectra and novelty over HTTP, against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from service.signals import novelty_of, thinned
from streaming.spectra import Spectrum, spectrum
from tests.service.serving import RunningService, check_problem, snapshots

pytestmark = pytest.mark.timeout(60)

STEP, FREQUENCY = 0.01, 6.25


def _wave(start: int, stop: int, burst_from: int) -> np.ndarray:
    """A wave of 6.25 Hz over the panel; from ``burst_from`` on with a pattern that was not there before."""
    x = np.linspace(0, 2 * np.pi, 48)
    rows = []
    for k in range(start, stop):
        phase = 2 * np.pi * FREQUENCY * STEP * k
        noise = np.random.default_rng((9, k)).standard_normal((2, 48))
        burst = 30.0 * np.where(np.arange(48) == 20, 1.0, 0.0) if k >= burst_from else 0.0
        rows.append(np.stack([np.cos(x - phase), np.sin(x - phase)]) + 0.05 * noise + burst)
    return np.array(rows, np.float32)


def _closed_run(service: RunningService, burst_from: int) -> str:
    made = service.declare(reference={"length": 0.2, "speed": 5.0})
    for sequence in range(8):
        service.put(made, sequence, _wave(40 * sequence, 40 * (sequence + 1), burst_from))
    service.client.post(f"/v1/runs/{made}/close")
    return made


def test_the_peak_of_a_wave(service: RunningService) -> None:
    run = _closed_run(service, burst_from=10**6)
    found = service.client.get(f"/v1/runs/{run}/spectra").json()
    frequencies, densities = np.array(found["frequencies"]), np.array(found["densities"])
    assert densities.shape == (2, len(frequencies))
    for density in densities:
        assert abs(frequencies[density.argmax()] - FREQUENCY) <= found["resolution"]
    assert found["strouhal"] == pytest.approx((frequencies * 0.2 / 5.0).tolist())
    assert found["n_snapshots"] == found["used_snapshots"] == 320
    few = service.client.get(f"/v1/runs/{run}/spectra?bins=16&n=1").json()
    assert len(few["frequencies"]) <= 16
    assert max(few["densities"][0]) == max(found["densities"][0])


def test_a_new_pattern_is_beyond_its_limit(service: RunningService) -> None:
    run = _closed_run(service, burst_from=300)
    found = service.client.get(f"/v1/runs/{run}/novelty").json()
    assert len(found["times"]) == 320
    outside, limit = (np.array(found[name], dtype=float) for name in ("outside", "outside_limit"))
    assert np.isnan(limit[:12]).all()
    assert (outside[300:303] > limit[300:303]).all()
    assert (outside[200:300] > limit[200:300]).mean() < 0.05
    last = service.client.get(f"/v1/runs/{run}/novelty?last=30").json()
    assert (last["first_snapshot"], len(last["times"])) == (290, 30)
    assert last["n_beyond"] <= found["n_beyond"]


def test_too_short_a_record_has_no_spectrum(service: RunningService) -> None:
    made = service.declare()
    check_problem(service.client.get(f"/v1/runs/{made}/spectra"), 404, "not-yet")
    service.put(made, 0, snapshots(0, 24))
    service.client.post(f"/v1/runs/{made}/close")
    check_problem(service.client.get(f"/v1/runs/{made}/spectra"), 404, "not-yet")
    check_problem(service.client.get(f"/v1/runs/{made}/spectra?n=99"), 422, "invalid-request")
    check_problem(service.client.get(f"/v1/runs/{made}/novelty?last=0"), 422, "invalid-request")


def test_thinning_keeps_every_peak() -> None:
    rng = np.random.default_rng(2)
    frequencies = np.arange(1, 5001) / 100.0
    densities = rng.exponential(size=(5000, 3))
    densities[1234] += 50.0
    found = spectrum(np.arange(200.0), rng.standard_normal((200, 1)))
    assert found is not None
    assert thinned(found, 512)[0].tolist() == found.frequencies.tolist()
    few, kept = thinned(Spectrum(frequencies, densities, 10.0), 64)
    assert len(few) <= 64
    assert (np.diff(few) > 0).all()
    assert frequencies[1234] in few
    for frequency, row in zip(few, kept, strict=True):
        assert (densities[np.searchsorted(frequencies, frequency)] == row).all()


def test_what_is_beyond_a_limit_is_counted() -> None:
    rows = np.array([[1.0, np.nan, np.nan, np.nan], [3.0, 2.0, 1.0, 9.0], [1.0, 2.0, 10.0, 9.0], [1.0, 2.0, 3.0, 9.0]])
    found = novelty_of(np.arange(4.0), rows, 10)
    assert (found.n_beyond, found.first_snapshot) == (2, 6)
    assert found.outside_limit[0] is None
