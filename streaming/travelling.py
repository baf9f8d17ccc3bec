"""Travelling pairs: two modes whose coefficients run a quarter period apart, and the wave that they make together.

With the pair's coefficients a1, a2 and shapes phi1, phi2 the motion is Re[(a1 - i a2)(phi1 + i phi2)]. It travels when
the coefficients are coherent and in quadrature; the wave vector is the slope of the phase of phi1 + i phi2.

References
----------
Aubry, Guyonnet & Lima (1991), J. Stat. Phys. 64, 683-739 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.signal import csd, welch
from scipy.spatial import cKDTree

from streaming.spectra import EVEN_TOLERANCE, MAX_SEGMENT, MIN_SNAPSHOTS, N_SEGMENTS

Array = npt.NDArray[np.float64]

MIN_COHERENCE = 0.7  # magnitude squared; independent series reach it in seven segments about once in 10^4
MAX_PHASE_ERROR_DEG = 30.0  # from a quarter period
MAX_POINTS = 2_000_000  # beyond these the search for neighbours would hold the next block up
MAX_ANCHORS = 20_000  # points whose neighbours are looked at, an even choice
N_NEIGHBOURS = 6
MAX_PHASE_STEP = 2.0  # radians between neighbours; larger ones cannot be told from their complement


@dataclass(frozen=True)
class PairMotion:
    """Two coefficients in quadrature.

    Attributes
    ----------
    frequency : at which they move, cycles per unit of time
    coherence : magnitude squared, 0 to 1
    phase_deg : of the second against the first; -90 when the second lags a quarter period
    """

    frequency: float
    coherence: float
    phase_deg: float


@dataclass(frozen=True)
class Wave:
    """Plane wave that fits the shapes of a pair best: wave length, and velocity (d,) of its phase."""

    wave_length: float
    velocity: Array


def pair_motion(times: Array, pair: Array, frequency: float | None) -> PairMotion | None:
    """Return how two coefficients (N, 2) move together at a frequency, or None when they are no travelling pair.

    Needs even times and a clear peak.
    """
    if frequency is None or len(times) < MIN_SNAPSHOTS:
        return None
    steps = np.diff(times)
    step = float(steps.mean())
    if np.abs(steps - step).max() > EVEN_TOLERANCE * step:
        return None
    segment = min(2 * len(times) // (N_SEGMENTS + 1), MAX_SEGMENT)
    frequencies, cross = csd(pair[:, 0], pair[:, 1], 1.0 / step, nperseg=segment)
    _, own = welch(pair, 1.0 / step, nperseg=segment, axis=0)
    k = int(np.argmin(np.abs(frequencies - frequency)))
    shared = float(np.abs(cross[k]) ** 2 / own[k].prod())
    phase = float(np.degrees(np.angle(cross[k])))
    if shared < MIN_COHERENCE or abs(abs(phase) - 90.0) > MAX_PHASE_ERROR_DEG:
        return None
    return PairMotion(frequency, shared, phase)


def wave_of_pair(motion: PairMotion, positions: Array, shapes: Array) -> Wave | None:
    """Return the wave that a pair makes, or None when its shapes have no phase that runs through space.

    Parameters
    ----------
    positions : (n, d) of the points
    shapes : (2, n_fields, n) the two modes

    Notes
    -----
    Least squares fit of k to the phase differences of phi1 + i phi2 between neighbouring points, weighted by
    its squared modulus: one wave vector for the whole field, however the wave is modulated.
    """
    if not 2 <= len(positions) <= MAX_POINTS:
        return None
    psi = shapes[0] + 1j * shapes[1]
    first, second = _neighbours(positions)
    products = np.conj(psi[:, first]) * psi[:, second]
    phases, weights = np.angle(products), np.abs(products)
    weights = np.where(np.abs(phases) < MAX_PHASE_STEP, weights, 0.0)
    offsets = positions[second] - positions[first]
    total = weights.sum(axis=0)
    normal = (offsets * total[:, None]).T @ offsets
    vector = np.linalg.lstsq(normal, offsets.T @ (weights * phases).sum(axis=0), rcond=1e-12)[0]
    square = float(vector @ vector)
    explained = float(vector @ normal @ vector) / max(float((weights * phases**2).sum()), np.finfo(float).tiny)
    if square == 0.0 or explained < 0.5:
        return None
    sense = -np.sign(motion.phase_deg)
    velocity = sense * 2.0 * np.pi * motion.frequency * vector / square
    return Wave(float(2.0 * np.pi / np.sqrt(square)), velocity)


def _neighbours(points: Array) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]]:
    """Pairs of points next to each other: at most `MAX_ANCHORS` of them, each with its nearest neighbours."""
    count = min(N_NEIGHBOURS + 1, len(points))
    anchors = np.arange(0, len(points), -(-len(points) // MAX_ANCHORS))
    _, indices = cKDTree(points).query(points[anchors], k=count)
    second = np.asarray(indices).reshape(len(anchors), count)[:, 1:]
    return np.repeat(anchors, count - 1), second.reshape(-1)
