"""The subspaces of two runs compared, from their newest checkpoints, one field at a time."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from service.campaigns import ComparedPoints, wanted_bound_deg
from service.core import Service
from service.problems import Problem
from service.results import Numbers, Source, newest
from streaming.report import Convergence
from streaming.subspaces import principal_angles_deg

# Modes of one field of both runs are in memory at once, in float64; what is larger is compared from the archives.
MAX_COMPARED_BYTES = 2**30


def compared(service: Service, first: str, second: str) -> ComparedPoints:
    """Principal angles between the wanted modes of two runs, in the inner product of the first.

    Raises the 404 problems, and the 422 problem when their fields or points differ.
    """
    with newest(service, first) as one, newest(service, second) as other:
        _check_comparable(first, one, second, other)
        count = min(one.n_modes, other.n_modes, *(it.declaration.criterion.n_modes for it in (one, other)))
        _check_size(one, count)
        try:
            angles = principal_angles_deg(_pieces(one, other, count))
        except np.linalg.LinAlgError as error:
            text = f"{first} or {second} holds fewer than {count} independent modes; ask again with more snapshots"
            raise Problem("not-yet", text) from error
    bounds = [_bound_deg(service, run) for run in (first, second)]
    known = [bound for bound in bounds if bound is not None]
    return ComparedPoints(
        between=[first, second],
        n_modes=count,
        angles_deg=angles.tolist(),
        angle_deg=float(angles[-1]),
        sampling_deg=sum(known) if len(known) == len(bounds) else None,
    )


def _check_comparable(first: str, one: Source, second: str, other: Source) -> None:
    a, b = one.declaration, other.declaration
    names = [[field.name for field in it.fields] for it in (a, b)]
    if a.n_points != b.n_points or names[0] != names[1]:
        raise Problem(
            "invalid-request",
            f"between: {first} has fields {names[0]} at {a.n_points} points, {second} has {names[1]} at {b.n_points}; "
            "only points measured alike can be compared",
        )


def _check_size(one: Source, count: int) -> None:
    needed = 4 * count * one.declaration.n_points * 8
    if needed > MAX_COMPARED_BYTES:
        raise Problem(
            "invalid-request",
            f"between: comparing {count} modes at {one.declaration.n_points} points needs {needed} bytes, at most "
            f"{MAX_COMPARED_BYTES} are spent on it; compare the checkpoint archives elsewhere",
            limit=MAX_COMPARED_BYTES,
        )


def _pieces(one: Source, other: Source, count: int) -> Iterator[tuple[Numbers, Numbers, Numbers]]:
    """Both sets of modes and the weights, field by field."""
    n_points = one.declaration.n_points
    scale = one.array("state/scale")
    for k, field in enumerate(one.declaration.fields):
        modes = [np.asarray(it.array(f"mode_{field.name}")[:count]).reshape(count, -1) for it in (one, other)]
        weights = np.asarray(scale[k * n_points : (k + 1) * n_points], np.float64) ** 2
        yield modes[0], modes[1], weights


def _bound_deg(service: Service, run_id: str) -> float | None:
    text = service.board.get(run_id).report
    report = None if text is None else Convergence.model_validate_json(text)
    return wanted_bound_deg(report, service.reader.run(run_id).declaration.criterion.n_modes)
