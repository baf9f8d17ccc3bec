"""Stationary random processes with known modes: what a run looks like when the answer is known beforehand."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg import eigh
from scipy.signal import lfilter

from streaming.groups import Group

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Sample:
    """One record of a process.

    Attributes
    ----------
    snapshots : (n, m)
    modes : (k, m) leading modes of the process, orthonormal
    groups : groups of equal energy among these modes, index ranges counted from 0
    """

    snapshots: Array
    modes: Array
    groups: tuple[Group, ...]


@dataclass(frozen=True)
class Process:
    """A process, and the run that is declared for it.

    ``draw`` makes a record of n snapshots from a seed; ``max_snapshots`` bounds a trial.
    """

    name: str
    about: str
    n_rows: int
    n_modes: int
    retained_rank: int
    max_snapshots: int
    draw: Callable[[int, int], Sample]


def autoregressive(rng: np.random.Generator, n: int, n_series: int, memory: float) -> Array:
    """Independent stationary AR(1) series of unit variance, (n, n_series), correlation exp(-lag / memory)."""
    keep = float(np.exp(-1.0 / memory))
    forcing = np.sqrt(1.0 - keep**2) * rng.standard_normal((n, n_series))
    start = keep * rng.standard_normal((1, n_series))
    series: Array = lfilter([1.0], [1.0, -keep], forcing, axis=0, zi=start)[0]
    return series


def waves(seed: int, n: int, memory: float, noise: float, burst: float = 0.0, n_points: int = 128) -> Sample:
    """Three travelling pairs around a ring with narrow-band amplitudes, in white noise.

    Pair k is Re(z_k exp(i kappa x)) with z_k a complex AR(1) process that turns at its own frequency; its span
    is that of the cosine and sine of its wave number, whatever the amplitude does. ``burst`` is the standard
    deviation of a slow random modulation of the logarithm of all amplitudes (log-normal bursts). Energies per
    mode are 4, 2, 1, plus the noise variance of each point.
    """
    rng = np.random.default_rng([seed, 1])
    x = 2.0 * np.pi * np.arange(n_points) / n_points
    rows = np.sqrt(noise) * rng.standard_normal((n, n_points))
    loud = np.exp(burst * autoregressive(rng, n, 1, 3.0 * memory)[:, 0] - burst**2) if burst else np.ones(n)
    modes = []
    for wave_number, period, energy in ((2, 10.0, 4.0), (3, 7.0, 2.0), (5, 4.3, 1.0)):
        real, imaginary = autoregressive(rng, n, 2, memory).T
        amplitude = loud * (real + 1j * imaginary) * np.exp(2j * np.pi * np.arange(n) / period)
        pair = np.sqrt(2.0 / n_points) * np.stack([np.cos(wave_number * x), np.sin(wave_number * x)])
        rows += np.sqrt(energy) * np.stack([amplitude.real, amplitude.imag], axis=1) @ pair
        modes.append(pair)
    return Sample(rows, np.concatenate(modes), ((0, 2), (2, 4), (4, 6)))


def kernel_field(seed: int, n: int, memory: float, inverse_length: float, n_points: int = 100) -> Sample:
    """Gaussian field on [0, 1] with covariance exp(-c |s - t|) and AR(1) coefficients of one memory.

    The modes are those of the covariance on the midpoint grid; its eigenvalues tend to the closed form of
    Ghanem & Spanos (1991), Stochastic Finite Elements, sec. 2.3 (section from memory).
    """
    rng = np.random.default_rng([seed, 2])
    x = (np.arange(n_points) + 0.5) / n_points
    values, vectors = eigh(np.exp(-inverse_length * np.abs(x[:, None] - x)) / n_points)
    energies, modes = np.maximum(values[::-1], 0.0), vectors[:, ::-1].T
    rows = (autoregressive(rng, n, n_points, memory) * np.sqrt(energies)) @ modes
    return Sample(rows, modes[:24], tuple((k, k + 1) for k in range(24)))


def _waves(name: str, about: str, max_snapshots: int, memory: float, noise: float, burst: float = 0.0) -> Process:
    def draw(seed: int, n: int) -> Sample:
        return waves(seed, n, memory, noise, burst)

    return Process(name, about, 128, 6, 16, max_snapshots, draw)


def _kernel(name: str, about: str, max_snapshots: int, memory: float, c: float, n_modes: int) -> Process:
    def draw(seed: int, n: int) -> Sample:
        return kernel_field(seed, n, memory, c)

    return Process(name, about, 100, n_modes, 20, max_snapshots, draw)


PROCESSES = {
    process.name: process
    for process in (
        _waves("waves-short", "three travelling pairs, memory 10", 8_000, 10.0, 0.02),
        _waves("waves-long", "three travelling pairs, memory 40", 16_000, 40.0, 0.02),
        _waves("waves-noise", "three travelling pairs in strong noise", 12_000, 10.0, 0.2),
        _waves("waves-bursts", "three travelling pairs that come in bursts", 24_000, 10.0, 0.02, 0.5),
        _kernel("kernel-short", "exponential kernel, memory 5", 16_000, 5.0, 1.0, 3),
        _kernel("kernel-long", "exponential kernel, memory 20", 48_000, 20.0, 1.0, 3),
        _kernel("kernel-close", "exponential kernel, close energies, memory 5", 24_000, 5.0, 5.0, 2),
    )
}
