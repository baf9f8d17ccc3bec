"""Streams for the tests; their invariants are checked when a test ends."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import pytest

from streaming import SnapshotStream
from tests.streaming.tolerances import orthonormality

MakeStream = Callable[..., SnapshotStream]


def declaration(n_points: int, **changes: Any) -> dict[str, Any]:
    """A small valid declaration with one field; ``changes`` override its members."""
    plain: dict[str, Any] = {
        "name": "duct",
        "n_points": n_points,
        "fields": [{"name": "p", "unit": "Pa"}],
        "dtype": "float64",
        "criterion": {"n_modes": 1, "startup": "keep"},
    }
    return {**plain, **changes}


def check_invariants(stream: SnapshotStream) -> None:
    """Basis orthonormal, values sorted, ledger and energies adding up."""
    if stream.n_applied == 0:
        return
    eps = orthonormality(stream.declaration.dtype)
    attributes, arrays = stream.export()
    basis, values = arrays["basis"].astype(np.float64), arrays["singular_values"]
    np.testing.assert_allclose(basis @ basis.T, np.eye(len(basis)), atol=eps)
    assert (np.diff(values) <= 0).all()
    total = attributes["total_energy"]
    np.testing.assert_allclose((values**2).sum() + attributes["discarded_energy"], total, rtol=eps, atol=1e-300)
    moments = stream.moments()
    assert moments.n_snapshots == stream.n_applied
    np.testing.assert_allclose(moments.energies.sum(), total, rtol=1e-12)


@pytest.fixture
def make_stream() -> Iterator[MakeStream]:
    """Return a function that makes streams; each is checked when the test ends."""
    made: list[SnapshotStream] = []

    def make(n_points: int, weights: Any = None, **changes: Any) -> SnapshotStream:
        made.append(SnapshotStream(declaration(n_points, **changes), weights))
        return made[-1]

    yield make
    for stream in made:
        check_invariants(stream)
