"""Checks at the edge of the engine: a batch is taken whole or refused with the reason, and then trusted."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from streaming.declaration import RunDeclaration
from streaming.errors import DeclarationError, SnapshotError
from streaming.threads import threads

Float = npt.NDArray[np.floating]
Array = npt.NDArray[np.float64]

SAMPLE_ROWS = 256  # rows compared first when looking for repeated snapshots


def parse_snapshots(declaration: RunDeclaration, snapshots: npt.ArrayLike) -> Float:
    """Return the batch as (n, m) in the declared dtype.

    Parameters
    ----------
    snapshots : (n, m), (n, n_fields, n_points) or, on a grid, (n, n_fields, *shape)

    Raises
    ------
    SnapshotError
        for another shape, values that are not floating point, NaN or infinite values
    """
    batch = np.asarray(snapshots)
    if batch.dtype.kind != "f":
        raise SnapshotError(f"snapshots must be floating point, got dtype {batch.dtype}; convert them first")
    accepted = accepted_shapes(declaration)
    if batch.ndim < 2 or batch.shape[1:] not in accepted:
        wanted = " or ".join(f"(n, {', '.join(map(str, shape))})" for shape in accepted)
        raise SnapshotError(f"a batch must have the shape {wanted}, got {batch.shape}")
    with np.errstate(over="ignore"):  # a float64 value too large for float32 becomes infinite and is named below
        rows = np.ascontiguousarray(batch.reshape(len(batch), declaration.n_rows), declaration.real_dtype)
    list(threads().map(lambda k: check_finite(declaration, k, rows[k]), range(len(rows))))
    return rows


def accepted_shapes(declaration: RunDeclaration) -> list[tuple[int, ...]]:
    """Shapes of one snapshot that a batch may have, without repeats."""
    n_fields = len(declaration.fields)
    shapes = [
        (n_fields, declaration.n_points),
        (declaration.n_rows,),
        (n_fields, *declaration.grid_shape),
    ]
    return list(dict.fromkeys(shapes))


def check_finite(declaration: RunDeclaration, snapshot: int, row: Float) -> None:
    """Raise SnapshotError when a row (m,) holds NaN or infinity, saying where."""
    with np.errstate(over="ignore", invalid="ignore"):
        if np.isfinite(np.add.reduce(row)):  # one cheap pass; a sum may also overflow, hence the second look
            return
    bad = np.flatnonzero(~np.isfinite(row))
    if len(bad) == 0:
        return
    field, point = divmod(int(bad[0]), declaration.n_points)
    raise SnapshotError(
        f"snapshot {snapshot} of the batch holds {len(bad)} values that are NaN or infinite (or too large for "
        f"{declaration.dtype}), the first in field {declaration.fields[field].name!r} at point {point}; mend the source"
    )


def parse_times(
    declaration: RunDeclaration, times: npt.ArrayLike | None, n_before: int, last: float | None, n_new: int
) -> Array:
    """Return the times (n,) of a batch, from the caller or from the declared step; they must increase.

    Parameters
    ----------
    n_before : snapshots absorbed so far
    last : time of the snapshot before, or None
    n_new : snapshots in the batch
    """
    step = declaration.time.step or 1.0
    given: Array = np.asarray(step * np.arange(n_before, n_before + n_new) if times is None else times, np.float64)
    if given.shape != (n_new,):
        raise SnapshotError(f"{n_new} snapshots need {n_new} times, got shape {given.shape}")
    if not np.isfinite(given).all():
        raise SnapshotError("times must be finite numbers")
    steps = np.diff(given, prepend=given[0] - 1.0 if last is None else last)
    if (steps <= 0).any():
        k = int(np.argmax(steps <= 0))
        raise SnapshotError(
            f"times must increase: snapshot {k} of the batch has time {given[k]}, the one before {given[k] - steps[k]}"
        )
    return given


def parse_weights(declaration: RunDeclaration, weights: npt.ArrayLike | None) -> Array | None:
    """Return the square roots of the weights for all rows, (m,); weights (n_points,) or (n_fields, n_points)."""
    if weights is None:
        return None
    given = np.asarray(weights, dtype=np.float64)
    n_fields = len(declaration.fields)
    if given.shape == (declaration.n_points,):
        given = np.broadcast_to(given, (n_fields, declaration.n_points))
    if given.shape != (n_fields, declaration.n_points):
        raise DeclarationError(
            f"weights must have shape ({declaration.n_points},) or ({n_fields}, {declaration.n_points}), "
            f"got {given.shape}"
        )
    if not (np.isfinite(given).all() and (given > 0).all()):
        raise DeclarationError("weights must be finite and positive; leave points without weight out of the run")
    roots: Array = np.sqrt(given).reshape(-1)
    return roots


def parse_positions(declaration: RunDeclaration, positions: npt.ArrayLike | None) -> Array | None:
    """Return positions (n_points, 1 to 3) of scattered points, a length, finite."""
    if positions is None:
        return None
    given = np.asarray(positions, dtype=np.float64)
    if declaration.grid.kind != "points":
        raise DeclarationError(f"positions belong to a grid of kind 'points', this run has {declaration.grid.kind!r}")
    if given.ndim != 2 or given.shape[0] != declaration.n_points or not 1 <= given.shape[1] <= 3:
        raise DeclarationError(f"positions must have shape ({declaration.n_points}, 1 to 3), got {given.shape}")
    if not np.isfinite(given).all():
        raise DeclarationError("positions must be finite numbers")
    return given


def count_repeats(previous: Float | None, rows: Float) -> int:
    """Number of snapshots in ``rows`` (n, m) that equal the one before in every row; ``previous`` (m,) came last."""
    stride = max(1, rows.shape[1] // SAMPLE_ROWS)
    repeats = 0
    for row in rows:
        if previous is not None and np.array_equal(row[::stride], previous[::stride]):
            repeats += int(np.array_equal(row, previous))
        previous = row
    return repeats
