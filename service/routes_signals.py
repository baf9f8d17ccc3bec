"""What the record says over time, from a checkpoint: spectra of the coefficients, and novelty of the snapshots."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from fastapi import APIRouter, Query

from service.access import ServiceOf
from service.bodies import refusals
from service.problems import Problem
from service.results import Source, chosen
from service.routes_results import Checkpoint, Count
from service.signals import Novelty, Spectra, novelty_of, spectra_of
from streaming.spectra import MIN_SNAPSHOTS, spectrum

router = APIRouter(prefix="/v1/runs/{run_id}", tags=["results"])

# Some 60 averaged periodograms of the longest segment; more would cost seconds and change nothing that can be seen.
MAX_SPECTRUM_SNAPSHOTS = 2**18
MAX_NOVELTY_SNAPSHOTS = 20_000  # about 2 MB of text
NOVELTY_ARRAY = "state/record_novelty"

Bins = Annotated[int, Query(ge=16, le=4096, description="largest number of frequencies given")]
Last = Annotated[int, Query(ge=1, le=MAX_NOVELTY_SNAPSHOTS, description="how many of the newest snapshots")]


@router.get("/spectra", responses=refusals(404, 422))
def read_spectra(
    run_id: str, service: ServiceOf, n: Count = None, bins: Bins = 512, checkpoint: Checkpoint = None
) -> Spectra:
    """Power spectral densities of the leading temporal coefficients; the wanted modes by default."""
    with chosen(service, run_id, checkpoint) as source:
        count = source.check_count("n", n or min(source.declaration.criterion.n_modes, source.n_modes))
        times = _newest(source, "time", MAX_SPECTRUM_SNAPSHOTS)
        series = _newest(source, "coefficient", MAX_SPECTRUM_SNAPSHOTS, count)
        found = spectrum(times, series)
        if found is None:
            raise Problem("not-yet", f"spectra need {MIN_SNAPSHOTS} snapshots, the checkpoint holds {len(times)}")
        return spectra_of(found, bins, source.n_snapshots, len(times), source.declaration.reference)


@router.get("/novelty", responses=refusals(404, 422))
def read_novelty(run_id: str, service: ServiceOf, last: Last = 2000, checkpoint: Checkpoint = None) -> Novelty:
    """How far the newest snapshots lay from what was known when they came, with control limits."""
    with chosen(service, run_id, checkpoint) as source:
        try:
            rows = _newest(source, NOVELTY_ARRAY, last)
        except KeyError as error:
            text = f"the checkpoint at {source.n_snapshots} snapshots was written before novelty was kept"
            raise Problem("not-yet", text) from error
        return novelty_of(_newest(source, "time", last), rows, source.n_snapshots)


def _newest(source: Source, name: str, last: int, n_columns: int | None = None) -> np.ndarray:
    """The last rows of an array of the checkpoint."""
    array = source.array(name)
    rows = slice(max(0, array.shape[0] - last), None)
    return np.asarray(array[rows] if n_columns is None else array[rows, :n_columns], dtype=np.float64)
