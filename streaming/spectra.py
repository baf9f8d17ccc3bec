"""Spectra of temporal coefficients: averaged periodograms, peak frequency and Strouhal number."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.signal import lombscargle, welch
from scipy.stats import chi2

Array = npt.NDArray[np.float64]

MIN_SNAPSHOTS = 64  # fewer leave too few frequencies to call one of them a peak
N_SEGMENTS = 7  # half overlapping segments of a quarter of the record each
MAX_SEGMENT = 16_384  # snapshots; bounds the cost, and is finer than any peak of a turbulent flow
MAX_UNEVEN_SEGMENT = 2_048  # the same where times are uneven and every frequency costs a pass over the segment
EVEN_TOLERANCE = 1e-3  # of the step, up to which times count as even
FALSE_PEAK_LEVEL = 0.01  # chance of a peak in a spectrum that has none
PEAK_HALFWIDTH_BINS = 3  # bins on either side that belong to the peak itself
BACKGROUND_BINS = 8  # beyond these, on either side, a peak is compared with; more at high frequencies


@dataclass(frozen=True)
class Spectrum:
    """One-sided power spectral density.

    Attributes
    ----------
    frequencies : (f,) ascending from above zero, cycles per unit of time
    densities : (f, n) variance per frequency, one column per series
    freedom : degrees of freedom of each density
    """

    frequencies: Array
    densities: Array
    freedom: float

    @property
    def resolution(self) -> float:
        """Distance of two frequencies that can be told apart: the noise bandwidth of the window, 1.5 bins."""
        return 1.5 * float(self.frequencies[1] - self.frequencies[0])


def spectrum(times: Array, series: Array) -> Spectrum | None:
    """Averaged periodograms of the columns of ``series`` (N, n), or None when the record is too short.

    Even times: Welch's method with Hann windows. Uneven times: Lomb-Scargle periodograms of the same segments;
    what a peak leaks to other frequencies then adds to the total, so only relative heights mean something.

    References
    ----------
    Welch (1967), IEEE Trans. Audio Electroacoust. 15, 70-73 (pages from memory); Lomb (1976), Astrophys. Space
    Sci. 39, 447 and Scargle (1982), Astrophys. J. 263, 835 (both from memory).
    """
    if len(times) < MIN_SNAPSHOTS:
        return None
    steps = np.diff(times)
    step = float(steps.mean())
    even = bool(np.abs(steps - step).max() <= EVEN_TOLERANCE * step)
    segment = min(2 * len(times) // (N_SEGMENTS + 1), MAX_SEGMENT if even else MAX_UNEVEN_SEGMENT)
    n_segments = 2 * len(times) // segment - 1
    if not even:
        return _uneven(times, series, segment, n_segments)
    frequencies, densities = welch(series, 1.0 / step, "hann", segment, axis=0)
    # Half overlapping Hann segments of white noise correlate with 1/6: methods of Welch (1967).
    freedom = 2.0 * n_segments / (1.0 + 2.0 * (1.0 / 6.0) ** 2 * (1.0 - 1.0 / n_segments))
    return Spectrum(frequencies[1:], densities[1:], freedom)


def _uneven(times: Array, series: Array, segment: int, n_segments: int) -> Spectrum:
    starts = np.arange(n_segments) * (segment // 2)
    span = float(np.mean([times[s + segment - 1] - times[s] for s in starts]))
    frequencies = np.arange(1, segment // 2 + 1) / span
    densities = np.zeros((len(frequencies), series.shape[1]))
    for s in starts:
        t, part = times[s : s + segment], series[s : s + segment]
        centred = part - part.mean(axis=0)
        for k in range(series.shape[1]):
            densities[:, k] += lombscargle(t - t[0], centred[:, k], 2.0 * np.pi * frequencies)
    scale = 2.0 * span / segment / n_segments
    return Spectrum(frequencies, scale * densities, float(n_segments + 1))


def peak_frequencies(times: Array, series: Array) -> tuple[float | None, ...]:
    """Frequency of the strongest clear peak of each column of ``series`` (N, n), None where there is none."""
    found = spectrum(times, series)
    if found is None:
        return (None,) * int(series.shape[1])
    peaks = [_peak(found, k) for k in range(len(found.densities.T))]
    return tuple(peaks)


def _peak(found: Spectrum, column: int) -> float | None:
    """Strongest bin that stands out of its neighbourhood by more than chance, refined by a parabola."""
    frequencies, density = found.frequencies, found.densities[:, column]
    threshold = float(chi2.isf(FALSE_PEAK_LEVEL / len(density), found.freedom) / chi2.ppf(0.5, found.freedom))
    for k in np.argsort(density)[::-1][: 4 * PEAK_HALFWIDTH_BINS]:
        if not 0 < k < len(density) - 1 or density[k] < max(density[k - 1], density[k + 1]):
            continue
        if density[k] > threshold * _background(density, int(k)):
            return _refined(frequencies, density, int(k))
    return None


def _background(density: Array, k: int) -> float:
    """Larger of the medians on either side of bin k, so that the slope of a spectrum is not taken for a peak."""
    reach = max(BACKGROUND_BINS, k // 3)
    below = density[max(0, k - PEAK_HALFWIDTH_BINS - reach) : max(0, k - PEAK_HALFWIDTH_BINS)]
    above = density[k + PEAK_HALFWIDTH_BINS + 1 : k + PEAK_HALFWIDTH_BINS + 1 + reach]
    if len(below) < 2 or len(above) < 2:
        return float("inf")  # a peak at the edge of what the record resolves cannot be told from a slope
    return float(max(np.median(below), np.median(above)))


def _refined(frequencies: Array, density: Array, k: int) -> float:
    """Vertex of the parabola through the logarithms of three densities."""
    with np.errstate(divide="ignore"):
        left, middle, right = np.log(density[k - 1 : k + 2])
    curvature = left - 2.0 * middle + right
    shift = 0.5 * (left - right) / curvature if np.isfinite(curvature) and curvature < 0 else 0.0
    return float(frequencies[k] + np.clip(shift, -0.5, 0.5) * (frequencies[1] - frequencies[0]))


def strouhal_number(frequency: float, length: float, speed: float) -> float:
    """St = f L / U."""
    return frequency * length / speed
