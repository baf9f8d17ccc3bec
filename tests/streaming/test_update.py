"""One block update: each fast path gives the general path's result, and the rows follow the small space."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.linalg import subspace_angles

from streaming.probes import N_PROBES, rademacher
from streaming.tall import TallRows
from streaming.update import GRAM_CONDITION, update_from_factor, update_from_gram


def rows_with(decay: float, n_rows: int = 3000, n: int = 20, seed: int = 6) -> np.ndarray:
    rng = np.random.default_rng(seed)
    structures, _ = np.linalg.qr(rng.standard_normal((n_rows, n)))
    amplitudes, _ = np.linalg.qr(rng.standard_normal((n, n)))
    out: np.ndarray = (amplitudes * decay ** np.arange(n)) @ structures.T
    return out


def filled(snapshots: np.ndarray, dtype: str = "float64", max_rank: int = 8) -> TallRows:
    tall = TallRows(snapshots.shape[1], max_rank, len(snapshots), dtype, None)
    tall.put(0, snapshots.astype(dtype))
    return tall


class TestPaths:
    @pytest.mark.parametrize("decay", [0.95, 0.7])
    def test_gram_and_factor_agree(self, decay: float) -> None:
        x = rows_with(decay)
        tall = filled(x)
        gram, _ = tall.project(20)
        fast = update_from_gram(np.zeros(0), gram, 8, "float64", math.inf)
        general = update_from_factor(np.zeros(0), tall.factor(20), 8, "float64")
        assert fast is not None
        np.testing.assert_allclose(fast.singular_values, general.singular_values, rtol=1e-10)
        np.testing.assert_allclose(fast.discarded_energy, general.discarded_energy, rtol=1e-10)
        angle = subspace_angles((fast.transform @ x).T, (general.transform @ x).T).max()
        assert angle < 1e-9

    def test_the_gram_matrix_is_refused_when_squaring_costs_too_much(self) -> None:
        for decay, trusted in ((0.9, True), (0.3, False)):
            gram, _ = filled(rows_with(decay)).project(20)
            found = update_from_gram(np.zeros(0), gram, 8, "float64", GRAM_CONDITION["float64"])
            assert (found is not None) is trusted

    def test_an_ill_conditioned_block_keeps_its_digits(self) -> None:
        """Singular values over 14 decades, from rows whose Gram matrix holds 8 of them."""
        tall = filled(rows_with(0.2))
        step = update_from_factor(np.zeros(0), tall.factor(20), 20, "float64")
        exact = 0.2 ** np.arange(20)
        np.testing.assert_allclose(step.singular_values[:8], exact[:8], rtol=1e-9)

    def test_double_products_of_float32_rows(self) -> None:
        x = rows_with(0.5).astype(np.float32)
        exact = np.linalg.svd(x.astype(float), compute_uv=False)
        step = update_from_gram(np.zeros(0), filled(x, "float32").gram_in_double(20), 8, "float32", math.inf)
        assert step is not None
        np.testing.assert_allclose(step.singular_values, exact[:8], rtol=1e-8)


class TestRows:
    def test_basis_coordinates_and_carried_vectors(self) -> None:
        first, second = rows_with(0.9), rows_with(0.8, seed=7)
        tall = filled(first)
        gram, probed = tall.project(20)
        one = update_from_factor(np.zeros(0), tall.factor(20), 8, "float64")
        tall.learn(one.transform, probed)
        old = tall.export(0)["basis"].copy()
        tall.put(0, second)
        gram, seen = tall.project(20)
        np.testing.assert_allclose(seen, second @ rademacher(3000, float).T, atol=1e-10)
        two = update_from_gram(one.singular_values, gram, 8, "float64", math.inf)
        assert two is not None
        tall.learn(two.transform, seen)
        new = tall.export(0)["basis"]
        np.testing.assert_allclose(new @ new.T, np.eye(8), atol=1e-10)
        np.testing.assert_allclose(two.coordinates, second @ new.T, atol=1e-9)
        np.testing.assert_allclose(two.carried, new @ old.T, atol=1e-9)

    def test_a_bent_basis_is_made_straight(self) -> None:
        tall = filled(rows_with(0.9))
        tall.rotate(np.eye(8, 20) + 1e-3)
        tall.orthonormalise()
        basis = tall.export(0)["basis"]
        np.testing.assert_allclose(basis @ basis.T, np.eye(8), atol=1e-13)

    def test_many_panels_are_one_array(self) -> None:
        rng = np.random.default_rng(0)
        x = rng.standard_normal((6, 150_001))
        tall = TallRows(150_001, 4, 6, "float64", None)
        tall.put(0, x[:2])
        tall.put(2, x[2:])
        np.testing.assert_array_equal(tall.export(6)["waiting"], x)
        gram, _ = tall.project(6)
        np.testing.assert_allclose(gram, x @ x.T, rtol=1e-12)


class TestProbes:
    def test_signs_are_fair_and_always_the_same(self) -> None:
        probes = rademacher(20_001, np.float32)
        assert probes.shape == (N_PROBES, 20_001)
        assert set(np.unique(probes)) == {-1.0, 1.0}
        np.testing.assert_array_equal(probes[:, :5000], rademacher(5000, np.float32))
        gram = probes.astype(float) @ probes.T / 20_001
        assert np.abs(gram - np.eye(N_PROBES)).max() < 5 / np.sqrt(20_001)

    def test_squared_norms_are_seen_without_bias(self) -> None:
        vectors = np.random.default_rng(2).standard_normal((400, 500))
        seen = ((vectors @ rademacher(500, float).T) ** 2).mean(axis=1)
        ratio = seen / (vectors**2).sum(axis=1)
        assert abs(ratio.mean() - 1) < 0.1
        assert 0.2 < ratio.std() < 0.5  # sqrt(2 / 16) = 0.35 for sixteen probes
