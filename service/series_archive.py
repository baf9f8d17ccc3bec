"""A span of time as low-order fields: a VTK XML file for each snapshot and a list of them, zipped while it is sent."""

from __future__ import annotations

import zipfile
from collections.abc import Iterator

import numpy as np

from service.archive import EPOCH, Outlet
from service.exporting import Array, Place, low_order_amplitudes, low_order_scalars
from service.low_order import times_of
from service.problems import Problem
from service.results import Source
from service.vtk_xml import VtkDocument, collection

MAX_FILES = 1000  # an animation of forty seconds; more is a job for the checkpoint archive


def series_zip(source: Source, place: Place, n_modes: int, span: tuple[float, float, int]) -> Iterator[bytes]:
    """The bytes of the zip file. Raises the 422 problem when the span is empty or too long, before anything is sent."""
    start, stop, every = span
    times = times_of(source)
    numbers = np.flatnonzero((times >= start) & (times <= stop))[::every]
    if not len(numbers):
        raise Problem("invalid-request", f"no snapshot lies between {start:g} and {stop:g}")
    if len(numbers) > MAX_FILES:
        raise Problem(
            "export-too-large",
            f"{len(numbers)} snapshots lie between {start:g} and {stop:g}, at most {MAX_FILES} are sent; raise every",
            limit=MAX_FILES,
        )
    names = [(float(times[number]), f"{number:09d}.{place.suffix}") for number in numbers]
    amplitudes = low_order_amplitudes(source, numbers, n_modes)
    return _zipped(source, place, amplitudes, names)


def _zipped(source: Source, place: Place, amplitudes: Array, names: list[tuple[float, str]]) -> Iterator[bytes]:
    outlet = Outlet()
    with zipfile.ZipFile(outlet, "w", zipfile.ZIP_STORED) as archive:
        archive.writestr(zipfile.ZipInfo("series.pvd", EPOCH), collection(names))
        for row, (_, name) in zip(amplitudes, names, strict=True):
            document = VtkDocument(place, low_order_scalars(source, row))
            with archive.open(zipfile.ZipInfo(name, EPOCH), "w", force_zip64=True) as entry:
                for part in document.parts():
                    entry.write(part)
                    yield outlet.fetch()
    yield outlet.fetch()
