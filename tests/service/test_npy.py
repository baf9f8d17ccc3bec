"""Strict reading of NPY headers: what numpy writes is read alike, everything else is refused."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.npy import NpyError, header_length, npy_bytes, parse_header
from tests.service.serving import npy

shapes = st.lists(st.integers(0, 7), min_size=1, max_size=5).map(tuple)
kinds = st.sampled_from(["<f4", ">f4", "<f8", ">f8"])


@given(shape=shapes, kind=kinds)
@settings(max_examples=60, deadline=None)
def test_reads_what_numpy_writes(shape: tuple[int, ...], kind: str) -> None:
    """Reference: numpy.save, which defines the format (NEP 1)."""
    body = npy(np.zeros(shape, kind))
    length = header_length(body)
    assert length is not None
    header = parse_header(body[:length])
    assert header.shape == shape
    assert header.dtype == np.dtype(kind)
    assert header.header_bytes + header.data_bytes == len(body)


@given(shape=shapes, kind=kinds)
@settings(max_examples=60, deadline=None)
def test_numpy_reads_what_is_sent(shape: tuple[int, ...], kind: str) -> None:
    values = np.arange(np.prod(shape), dtype=kind).reshape(shape)
    assert npy_bytes(values) == npy(values)


def test_a_short_start_is_not_judged_early() -> None:
    body = npy(np.zeros(3))
    for length in range(10):
        assert header_length(body[:length]) is None
    assert header_length(body[:10]) == 128


@pytest.mark.parametrize("version", [(1, 0), (2, 0), (3, 0)])
def test_all_versions(version: tuple[int, int]) -> None:
    import io

    buffer = io.BytesIO()
    np.lib.format.write_array(buffer, np.zeros((2, 3)), version=version)
    body = buffer.getvalue()
    length = header_length(body)
    assert length is not None
    assert parse_header(body[:length]).shape == (2, 3)


@given(data=st.binary(max_size=300))
@settings(max_examples=300, deadline=None)
def test_noise_is_refused_and_nothing_else_happens(data: bytes) -> None:
    for start in (data, b"\x93NUMPY\x01\x00" + data, b"\x93NUMPY\x01\x00\x40\x00" + data):
        try:
            length = header_length(start)
            if length is not None and length <= len(start):
                parse_header(start[:length])
        except NpyError:
            continue


@pytest.mark.parametrize(
    "text",
    [
        "{'descr': '<f4', 'fortran_order': False, 'shape': (2, -1)}",
        "{'descr': '<f4', 'fortran_order': False, 'shape': (2, True)}",
        "{'descr': '<f4', 'fortran_order': False, 'shape': (2.0,)}",
        "{'descr': '<f4', 'fortran_order': False, 'shape': [2]}",
        "{'descr': '<f4', 'fortran_order': False, 'shape': ()}",
        "{'descr': '<f4', 'fortran_order': 0, 'shape': (2,)}",
        "{'descr': '<f4', 'fortran_order': False}",
        "{'descr': '<f4', 'fortran_order': False, 'shape': (2,), 'more': 1}",
        "{'descr': [('a', '<f4')], 'fortran_order': False, 'shape': (2,)}",
        "{'descr': '<M8[s]', 'fortran_order': False, 'shape': (2,)}",
        "{'descr': ['<f4'], 'fortran_order': False, 'shape': (2,)}",
        "{1: 2}",
        "{[]: 2}",
        "1" * 4000,
    ],
)
def test_other_headers_are_refused(text: str) -> None:
    header = b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text.encode()
    with pytest.raises(NpyError):
        parse_header(header)
