"""Arrays leave as NPY bodies that numpy itself reads back, with the digest of exactly those bytes."""

from __future__ import annotations

import base64
import hashlib
import io
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from slackwater_client.npy import CHUNK_BYTES, NpyBody

RNG = np.random.default_rng(8)


@pytest.mark.parametrize(
    ("values", "dtype"),
    [
        (RNG.normal(size=(3, 2, 5)).astype("<f4"), "<f4"),
        (RNG.normal(size=(3, 2, 5)), "<f8"),
        (RNG.normal(size=(3, 10)).astype(">f8"), "<f8"),
        (np.asfortranarray(RNG.normal(size=(4, 6)).astype("<f4")), "<f4"),
        (RNG.normal(size=(8, 6))[::2, ::3], "<f8"),
        (np.arange(12).reshape(3, 4), "<f8"),
        ([[1.0, 2.0], [3.0, 4.0]], "<f8"),
        (np.zeros((3, CHUNK_BYTES // 4), dtype="<f4"), "<f4"),
    ],
)
def test_numpy_reads_the_body_back(values: npt.NDArray[Any], dtype: str) -> None:
    body = NpyBody(values)
    sent = b"".join(bytes(chunk) for chunk in body.chunks())
    back = np.load(io.BytesIO(sent), allow_pickle=False)
    assert back.dtype == np.dtype(dtype)
    np.testing.assert_array_equal(back, np.asarray(values))
    assert len(sent) == body.n_bytes == int(body.headers()["Content-Length"])
    assert body.digest == f"sha-256=:{base64.b64encode(hashlib.sha256(sent).digest()).decode()}:"


def test_values_are_sent_from_where_they_lie() -> None:
    values = RNG.normal(size=(4, 30))
    assert np.shares_memory(NpyBody(values).values, values)


@pytest.mark.parametrize("values", [np.zeros((2, 3), dtype=complex), np.array(["a"]), np.array([object()])])
def test_what_is_not_real_is_refused(values: npt.NDArray[Any]) -> None:
    with pytest.raises(ValueError, match="real numbers"):
        NpyBody(values)


def test_nothing_is_refused() -> None:
    with pytest.raises(ValueError, match=r"\(0, 5\)"):
        NpyBody(np.zeros((0, 5)))
