"""What the temporal coefficients say at a look: peak frequencies of modes, and pairs that travel."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from streaming.report import Convergence, Travelling
from streaming.spectra import peak_frequencies
from streaming.travelling import PairMotion, pair_motion, wave_of_pair

Array = npt.NDArray[np.float64]
Shapes = npt.NDArray[np.floating]

MAX_SNAPSHOTS = 2**17  # the newest ones; bounds the memory and the time of a look


@dataclass(frozen=True)
class Motion:
    """Peak frequency of each wanted mode, and the travelling pairs among them."""

    peaks: tuple[float | None, ...] = ()
    pairs: tuple[Travelling, ...] = ()

    def pair_in(self, group: tuple[int, int]) -> Travelling | None:
        """Return the first pair that has a mode in a group [start, stop), counted from 0."""
        start, stop = group
        return next((pair for pair in self.pairs if any(start < mode <= stop for mode in pair.modes)), None)

    @staticmethod
    def of_report(report: Convergence) -> Motion:
        """Return what a report holds of the motion."""
        found = {group.travelling.modes[0]: group.travelling for group in report.groups if group.travelling}
        return Motion(tuple(mode.peak_frequency for mode in report.modes), tuple(found.values()))


def find_motion(times: Array, series: Array, positions: Array | None, shapes_of: Callable[[slice], Shapes]) -> Motion:
    """Analyse the coefficients (N, n) of the wanted modes; a mode belongs to one pair at most.

    ``shapes_of`` gives modes as (2, n_fields, n_points); it is called for pairs in quadrature alone. The two modes
    of a pair may be in one group or, where the record tells their energies apart, in two.
    """
    peaks = peak_frequencies(times, series)
    pairs: list[Travelling] = []
    k = 0
    while k + 1 < len(peaks):
        both = slice(k, k + 2)
        motion = pair_motion(times, series[:, both], peaks[k])
        if motion is not None:
            pairs.append(_travelling(k, motion, positions, None if positions is None else shapes_of(both)))
        k += 1 if motion is None else 2
    return Motion(peaks, tuple(pairs))


def _travelling(first: int, motion: PairMotion, positions: Array | None, shapes: Shapes | None) -> Travelling:
    wave = None if positions is None or shapes is None else wave_of_pair(motion, positions, shapes.astype(np.float64))
    return Travelling(
        modes=[first + 1, first + 2],
        frequency=motion.frequency,
        coherence=motion.coherence,
        phase_deg=motion.phase_deg,
        wave_length=None if wave is None else wave.wave_length,
        velocity=None if wave is None else [float(v) for v in wave.velocity],
        speed=None if wave is None else float(np.linalg.norm(wave.velocity)),
    )
