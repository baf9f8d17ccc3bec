"""What a body must be for a given declaration: decided from its header, and each value checked as it comes."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from service.npy import FLOAT_TYPES, WHOLE_TYPES, ArrayHeader
from service.problems import Problem
from streaming.declaration import Part, RunDeclaration
from streaming.intake import accepted_shapes


@dataclass(frozen=True)
class Expected:
    """One kind of body: ``check`` raises the problem of a header that does not fit, ``place`` names a value.

    ``dtype`` is the type in which the values must be finite.
    """

    what: str
    dtype: np.dtype[Any]
    check: Callable[[ArrayHeader], None]
    place: Callable[[ArrayHeader, int], dict[str, Any]]
    types: tuple[str, ...] = FLOAT_TYPES


def expect_batch(declaration: RunDeclaration, max_snapshots: int) -> Expected:
    """A batch of snapshots."""

    return _expect_snapshots(
        declaration, accepted_shapes(declaration), Part(start=0, stop=declaration.n_points), max_snapshots
    )


def expect_part(declaration: RunDeclaration, part: Part, max_snapshots: int) -> Expected:
    """A batch of the points of one part."""
    n_fields = len(declaration.fields)
    shapes = list(dict.fromkeys([(n_fields, part.n_points), (n_fields * part.n_points,)]))
    return _expect_snapshots(declaration, shapes, part, max_snapshots)


def _expect_snapshots(
    declaration: RunDeclaration, shapes: Sequence[tuple[int, ...]], points: Part, max_snapshots: int
) -> Expected:
    def check(header: ArrayHeader) -> None:
        _check_batch(header, declaration, shapes, max_snapshots)

    def place(header: ArrayHeader, index: int) -> dict[str, Any]:
        snapshot, row = divmod(index, len(declaration.fields) * points.n_points)
        field, point = divmod(row, points.n_points)
        return {"snapshot": snapshot, "field": declaration.fields[field].name, "point": points.start + point}

    return Expected("batch", declaration.real_dtype, check, place)


def expect_weights(declaration: RunDeclaration) -> Expected:
    """One weight for each point, or for each field and point."""
    wanted = [(declaration.n_points,), (len(declaration.fields), declaration.n_points)]
    return Expected("weights", np.dtype(np.float64), _one_of("weights", wanted), _index)


def expect_positions(declaration: RunDeclaration) -> Expected:
    """One to three coordinates for each scattered point."""
    if declaration.grid.kind != "points":
        raise Problem(
            "wrong-shape",
            f"positions belong to a run whose grid is of kind points, this one is {declaration.grid.kind}",
        )
    wanted = [(declaration.n_points, axes) for axes in (1, 2, 3)]
    return Expected("positions", np.dtype(np.float64), _one_of("positions", wanted), _index)


def expect_triangles(declaration: RunDeclaration) -> Expected:
    """Three point numbers for each triangle of scattered points."""
    if declaration.grid.kind != "points":
        raise Problem(
            "wrong-shape",
            f"triangles belong to a run whose grid is of kind points, this one is {declaration.grid.kind}",
        )

    def check(header: ArrayHeader) -> None:
        if len(header.shape) != 2 or header.shape[1] != 3 or header.shape[0] < 1:
            raise Problem("wrong-shape", f"triangles have shape {list(header.shape)}; send [n_triangles, 3]")

    return Expected("triangles", np.dtype(np.float64), check, _index, WHOLE_TYPES + FLOAT_TYPES)


def parse_triangles(declaration: RunDeclaration, triangles: npt.NDArray[Any]) -> npt.NDArray[np.int64]:
    """Point numbers (n, 3), counted from 0. Raises the 422 problem."""
    whole: npt.NDArray[np.int64] = triangles.astype(np.int64)
    bad = (whole != triangles) | (whole < 0) | (whole >= declaration.n_points)
    if bad.any():
        k = int(np.flatnonzero(bad.any(axis=1))[0])
        raise Problem(
            "wrong-values",
            f"triangle {k} is {triangles[k].tolist()}; points count from 0 to {declaration.n_points - 1}",
        )
    return whole


def _check_batch(
    header: ArrayHeader, declaration: RunDeclaration, wanted: Sequence[tuple[int, ...]], max_snapshots: int
) -> None:
    shape = header.shape
    if len(shape) < 2 or shape[1:] not in wanted:
        texts = " or ".join(f"[n_snapshots, {', '.join(map(str, one))}]" for one in wanted)
        names = ", ".join(field.name for field in declaration.fields)
        raise Problem(
            "wrong-shape",
            f"the batch has shape {list(shape)}; send {texts}, fields in the order {names}",
            got=list(shape),
        )
    if shape[0] < 1:
        raise Problem("wrong-shape", "the batch holds no snapshots; send at least one", got=list(shape))
    if shape[0] > max_snapshots:
        raise Problem(
            "body-too-large",
            f"the batch holds {shape[0]} snapshots, at most {max_snapshots} are taken in one; send fewer",
            limit=max_snapshots,
        )


def _one_of(what: str, wanted: Sequence[tuple[int, ...]]) -> Callable[[ArrayHeader], None]:
    def check(header: ArrayHeader) -> None:
        if header.shape not in wanted:
            texts = " or ".join(str(list(shape)) for shape in wanted)
            raise Problem(
                "wrong-shape",
                f"{what} have shape {list(header.shape)}; this run takes {texts}",
                got=list(header.shape),
            )

    return check


def _index(header: ArrayHeader, index: int) -> dict[str, Any]:
    return {"index": [int(k) for k in np.unravel_index(index, header.shape)]}
