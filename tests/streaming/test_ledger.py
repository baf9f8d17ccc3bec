"""The ledger against plain sums over the snapshots, and the record of coefficients."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from streaming.ledger import ENTRIES_PER_BLOCK, MAX_ENTRIES, Ledger, first_span
from streaming.moments import Moments
from streaming.record import CoefficientRecord

RNG = np.random.default_rng(12)
R, P = 5, 3


def ledger_of(z: np.ndarray, span: int, batch: int) -> Ledger:
    ledger = Ledger(R, P, span)
    ledger.carry(np.zeros((R, 0)))
    for start in range(0, len(z), batch):
        part = z[start : start + batch]
        ledger.add(part[:, :R], part[:, R:], (part**2).sum(axis=1), np.arange(start, start + len(part), dtype=float))
    return ledger


def read(ledger: Ledger) -> Moments:
    return ledger.moments(np.zeros((P, R)), 0.0)


@pytest.mark.parametrize(("span", "batch"), [(1, 8), (3, 7), (8, 8), (5, 40)])
@pytest.mark.parametrize("n", [10, 64, 500, 2000])
def test_moments_are_those_of_the_snapshots(span: int, batch: int, n: int) -> None:
    z = RNG.standard_normal((n, R + P)) + 1e3
    moments = read(ledger_of(z, span, batch))
    assert 1 <= moments.n_blocks <= MAX_ENTRIES
    assert moments.n_snapshots == n
    np.testing.assert_allclose(moments.mean(), z.mean(axis=0), rtol=1e-13)
    np.testing.assert_allclose(moments.covariance(), np.cov(z.T, bias=True), atol=1e-9)
    np.testing.assert_allclose(moments.energies.sum(), (z**2).sum(), rtol=1e-13)
    start = 0
    for count, mean, scatter, times in zip(
        moments.counts.astype(int), moments.means, moments.scatters, moments.times, strict=True
    ):
        part = z[start : start + count]
        np.testing.assert_allclose(mean, part.mean(axis=0), rtol=1e-12)
        np.testing.assert_allclose(scatter, np.cov(part.T, bias=True) * count, atol=1e-7)
        assert tuple(times) == (start, start + count - 1)
        start += count
    assert len(set(moments.counts[:-1])) <= 1


def test_turning_the_basis_turns_every_entry() -> None:
    z = RNG.standard_normal((300, R + P))
    turn = np.linalg.qr(RNG.standard_normal((R, R)))[0][:4]
    turned = np.concatenate([z[:, :R] @ turn.T, z[:, R:]], axis=1)
    ledger = ledger_of(z, 4, 20)
    ledger.carry(turn)
    moments = read(ledger)
    assert moments.rank == 4
    np.testing.assert_allclose(moments.covariance(), np.cov(turned.T, bias=True), atol=1e-13)
    ledger.add(np.zeros((2, 4)), np.zeros((2, P)), np.zeros(2), np.array([300.0, 301.0]))


def test_joining_neighbours_keeps_all_sums() -> None:
    z = RNG.standard_normal((200, R + P))
    moments = read(ledger_of(z, 5, 20))
    for factor in (2, 3, 7):
        joined = moments.joined(factor)
        assert joined.n_blocks == -(-moments.n_blocks // factor)
        np.testing.assert_allclose(joined.covariance(), moments.covariance(), rtol=1e-12, atol=1e-15)


@pytest.mark.parametrize("block_length", [2, 7, 16, 24, 64, 80, 97])
def test_spans_divide_the_block(block_length: int) -> None:
    span = first_span(block_length)
    assert block_length % span == 0
    assert block_length // span >= min(ENTRIES_PER_BLOCK, block_length)


@pytest.mark.parametrize("on_disk", [True, False])
def test_the_record_gives_all_coefficients_in_the_last_basis(tmp_path: Path, on_disk: bool) -> None:
    record = CoefficientRecord(R, 10, tmp_path / "record" if on_disk else None)
    turns = [np.linalg.qr(RNG.standard_normal((R, R)))[0] for _ in range(4)]
    taken = [RNG.standard_normal((n, R)) for n in (10, 10, 10, 4)]
    for k, (turn, coordinates) in enumerate(zip(turns, taken, strict=True)):
        record.append(10.0 * k + np.arange(len(coordinates)), coordinates, turn, np.full((len(coordinates), 4), k))
    times, coefficients = record.read()
    expected = [taken[3], taken[2] @ turns[3].T, taken[1] @ (turns[3] @ turns[2]).T]
    np.testing.assert_allclose(coefficients[-4:], expected[0])
    np.testing.assert_allclose(coefficients[20:30], expected[1], atol=1e-14)
    np.testing.assert_allclose(coefficients[10:20], expected[2], atol=1e-14)
    assert len(times) == 34
    np.testing.assert_array_equal(record.read_novelty()[1][:, 2], [0] * 10 + [1] * 10 + [2] * 10 + [3] * 4)
    record.fill(times, coefficients, np.zeros((34, 4)))
    np.testing.assert_array_equal(record.read()[1], coefficients)
    record.close()
