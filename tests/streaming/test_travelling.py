"""Travelling pairs: quadrature found where it is, and the convection speed of plane waves."""

from __future__ import annotations

import numpy as np
import pytest

from streaming.travelling import pair_motion, wave_of_pair
from tests.streaming.conftest import MakeStream

RNG = np.random.default_rng(3)
TIMES = 0.005 * np.arange(2000)


def test_a_plane_wave_on_a_grid_moves_at_its_speed(make_stream: MakeStream) -> None:
    """cos(k x - omega t) moves at omega / |k| along k (definition of the phase speed)."""
    y, x = np.meshgrid(0.012 * np.arange(30), 0.01 * np.arange(60), indexing="ij")
    wave, frequency = np.array([20.0, 6.0]), 3.3
    phase = wave[0] * x + wave[1] * y
    envelope = np.exp(-(((y - 0.2) / 0.1) ** 2))
    snapshots = [envelope * np.cos(phase - 2 * np.pi * frequency * t) for t in TIMES]
    noisy = np.reshape(snapshots, (2000, -1)) + 0.05 * RNG.standard_normal((2000, 1800))
    stream = make_stream(
        1800,
        retained_rank=10,
        time={"step": 0.005},
        grid={"kind": "uniform", "shape": [30, 60], "spacing": [0.012, 0.01]},
        criterion={"n_modes": 2},
    )
    stream.absorb(noisy)
    stream.close()
    groups = stream.convergence().groups
    found = groups[0].travelling
    assert found is not None
    assert found.modes == [1, 2]
    assert groups[-1].travelling == found
    assert found.coherence > 0.99
    assert abs(abs(found.phase_deg) - 90) < 2
    expected = 2 * np.pi * frequency * wave / (wave @ wave)
    np.testing.assert_allclose(found.velocity, expected, rtol=0.01)
    assert found.speed == pytest.approx(np.linalg.norm(expected), rel=0.01)
    assert found.wave_length == pytest.approx(2 * np.pi / np.linalg.norm(wave), rel=0.01)


@pytest.mark.parametrize("direction", [1.0, -1.0])
def test_the_sense_on_scattered_points(direction: float) -> None:
    positions = RNG.uniform(0, 1, (500, 3))
    vector = np.array([3.0, -2.0, 1.0])
    shapes = np.stack([np.cos(positions @ vector), np.sin(positions @ vector)])[:, None]
    angle = 2 * np.pi * 4.0 * TIMES * direction
    motion = pair_motion(TIMES, np.stack([np.cos(angle), np.sin(angle)], axis=1), 4.0)
    assert motion is not None
    wave = wave_of_pair(motion, positions, shapes)
    assert wave is not None
    np.testing.assert_allclose(wave.velocity, direction * 2 * np.pi * 4.0 * vector / 14.0, rtol=0.01)


def test_what_does_not_travel() -> None:
    angle = 2 * np.pi * 4.0 * TIMES
    in_phase = np.stack([np.cos(angle), np.cos(angle + 0.2)], axis=1)
    assert pair_motion(TIMES, in_phase, 4.0) is None
    independent = RNG.standard_normal((200, 2000, 2))
    assert not any(pair_motion(TIMES, pair, 4.0) for pair in independent)
    assert pair_motion(np.cumsum(RNG.uniform(0.001, 0.01, 2000)), in_phase, 4.0) is None
    assert pair_motion(TIMES, in_phase, None) is None


def test_shapes_without_a_running_phase_have_no_wave() -> None:
    positions = RNG.uniform(0, 1, (500, 2))
    motion = pair_motion(TIMES, np.stack([np.cos(25 * TIMES), np.sin(25 * TIMES)], axis=1), 25 / (2 * np.pi))
    assert motion is not None
    assert wave_of_pair(motion, positions, RNG.standard_normal((2, 1, 500))) is None
