"""Spectra of the temporal coefficients and the novelty of snapshots, made small enough to send and to draw."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from pydantic import Field

from streaming.declaration import Model, Reference
from streaming.novelty import ALARM_LEVEL, COLUMNS
from streaming.spectra import Spectrum, strouhal_number

Array = npt.NDArray[np.float64]


class Spectra(Model):
    """One-sided power spectral densities of the leading coefficients, strongest of each bin of frequencies."""

    n_snapshots: int = Field(description="snapshots of the checkpoint")
    used_snapshots: int = Field(description="the newest ones, from which the spectra are made")
    frequencies: list[float] = Field(description="cycles per unit of time of the run, ascending")
    strouhal: list[float] | None = Field(description="the same as Strouhal numbers, when a reference is declared")
    densities: list[list[float]] = Field(description="one list for each mode, from mode 1; variance per frequency")
    resolution: float = Field(description="distance of two frequencies that can be told apart")
    freedom: float = Field(description="degrees of freedom of each density before the strongest was taken")


class Novelty(Model):
    """How new each snapshot was when it came; null where nothing was known yet."""

    n_snapshots: int = Field(description="snapshots of the checkpoint")
    first_snapshot: int = Field(description="number of the first one given, from 0")
    times: list[float]
    outside: list[float | None] = Field(description="energy outside the basis")
    outside_limit: list[float | None]
    hotelling: list[float | None] = Field(description="squared Hotelling distance within the wanted modes")
    hotelling_limit: list[float | None]
    alarm_level: float = Field(description="chance of a snapshot of the same regime to exceed a limit")
    n_beyond: int = Field(description="snapshots given here that exceed one of their limits")


def thinned(found: Spectrum, n_bins: int) -> tuple[Array, Array]:
    """Frequencies (b,) and densities (b, n): at most ``n_bins`` bins, even on a logarithmic axis.

    Of each bin the strongest density and its frequency are kept, by the sum over the modes, so that no peak is lost.
    """
    frequencies, densities = found.frequencies, found.densities
    if len(frequencies) <= n_bins:
        return frequencies, densities
    edges = np.geomspace(frequencies[0], frequencies[-1], n_bins + 1)[1:-1]
    bins = np.searchsorted(edges, frequencies, side="right")
    order = np.lexsort((densities.sum(axis=1), bins))
    last = np.flatnonzero(np.diff(bins[order], append=n_bins))
    strongest = order[last]
    return frequencies[strongest], densities[strongest]


def spectra_of(found: Spectrum, n_bins: int, n_snapshots: int, used: int, reference: Reference | None) -> Spectra:
    """The answer for a spectrum."""
    frequencies, densities = thinned(found, n_bins)
    numbers = None
    if reference is not None:
        numbers = [strouhal_number(float(f), reference.length, reference.speed) for f in frequencies]
    return Spectra(
        n_snapshots=n_snapshots,
        used_snapshots=used,
        frequencies=frequencies.tolist(),
        strouhal=numbers,
        densities=densities.T.tolist(),
        resolution=found.resolution,
        freedom=found.freedom,
    )


def novelty_of(times: Array, rows: Array, n_snapshots: int) -> Novelty:
    """The answer for the newest rows (n, 4) of a record, columns as in `streaming.novelty.COLUMNS`."""
    values = dict(zip(COLUMNS, rows.T, strict=True))
    with np.errstate(invalid="ignore"):  # NaN where there is no limit yet: nothing is beyond it
        outside = values["outside"] > values["outside_limit"]
        within = values["hotelling"] > values["hotelling_limit"]
    return Novelty(
        n_snapshots=n_snapshots,
        first_snapshot=n_snapshots - len(times),
        times=times.tolist(),
        alarm_level=ALARM_LEVEL,
        n_beyond=int((outside | within).sum()),
        **{name: [float(v) if np.isfinite(v) else None for v in column] for name, column in values.items()},
    )
