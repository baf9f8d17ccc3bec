"""The streamed decomposition against dense linear algebra, closed forms and published data."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import subspace_angles, svd

from streaming import SnapshotStream
from tests.streaming.conftest import MakeStream
from tests.streaming.tolerances import CLOSED_FORM, DISCRETE_SPECTRUM, VALUES


def feed(stream: SnapshotStream, snapshots: np.ndarray, batch: int) -> SnapshotStream:
    for start in range(0, len(snapshots), batch):
        stream.absorb(snapshots[start : start + batch])
    stream.close()
    return stream


def decaying(n_snapshots: int, n_points: int, decay: float, seed: int = 3) -> np.ndarray:
    """Random snapshots with singular values decay^k, plus a mean field."""
    rng = np.random.default_rng(seed)
    rank = min(n_snapshots, n_points)
    left, _ = np.linalg.qr(rng.standard_normal((n_snapshots, rank)))
    right, _ = np.linalg.qr(rng.standard_normal((n_points, rank)))
    out: np.ndarray = (left * decay ** np.arange(rank)) @ right.T + rng.standard_normal(n_points)
    return out


class TestAgainstDenseSvd:
    """scipy.linalg.svd of the weighted, centred snapshots is the oracle."""

    @pytest.mark.parametrize("batch", [1, 3, 10, 37, 90])
    def test_equal_when_nothing_is_truncated(self, make_stream: MakeStream, batch: int) -> None:
        x = decaying(90, 150, 0.93)
        weights = np.random.default_rng(0).uniform(0.5, 2.0, 150)
        stream = feed(make_stream(150, weights, retained_rank=120, block_length=16), x, batch)
        _, values, right = svd(np.sqrt(weights) * (x - x.mean(axis=0)), full_matrices=False)
        np.testing.assert_allclose(stream.singular_values()[:89], values[:89], rtol=VALUES)
        modes = stream.modes(20)[:, 0] * np.sqrt(weights)
        assert subspace_angles(modes.T, right[:20].T).max() < VALUES
        np.testing.assert_allclose(stream.mean()[0], x.mean(axis=0), atol=1e-13)

    def test_modes_are_orthonormal_in_the_weighted_inner_product(self, make_stream: MakeStream) -> None:
        weights = np.linspace(0.2, 3.0, 150)
        stream = feed(make_stream(150, weights, retained_rank=40), decaying(90, 150, 0.9), 11)
        modes = stream.modes()[:, 0]
        np.testing.assert_allclose((modes * weights) @ modes.T, np.eye(len(modes)), atol=1e-12)

    def test_coefficients_rebuild_the_fluctuations(self, make_stream: MakeStream) -> None:
        x = decaying(90, 150, 0.9)
        stream = feed(make_stream(150, retained_rank=120, block_length=16), x, 7)
        times, coefficients = stream.coefficients()
        rebuilt = np.tensordot(coefficients, stream.modes()[:, 0], axes=1) + stream.mean()[0]
        np.testing.assert_allclose(rebuilt, x, atol=1e-11)
        np.testing.assert_array_equal(times, np.arange(90.0))

    def test_several_fields_and_unit_variance(self, make_stream: MakeStream) -> None:
        rng = np.random.default_rng(5)
        x = rng.standard_normal((60, 2, 40)) * np.array([1.0, 1e4])[:, None]
        fields = [{"name": "u", "unit": "m/s"}, {"name": "p", "unit": "Pa"}]
        stream = make_stream(40, fields=fields, scaling="unit-variance", retained_rank=70, block_length=60)
        stream.absorb(x)
        stream.close()
        centred = x - x.mean(axis=0)
        scaled = centred / np.sqrt((centred**2).mean(axis=(0, 2)))[:, None]
        values = svd(scaled.reshape(60, 80), compute_uv=False)
        np.testing.assert_allclose(stream.singular_values()[:59], values[:59], rtol=VALUES)

    def test_float32_keeps_its_own_precision(self, make_stream: MakeStream) -> None:
        x = decaying(90, 150, 0.93).astype(np.float32)
        stream = feed(make_stream(150, dtype="float32", retained_rank=120, block_length=16), x, 9)
        values = svd(x.astype(float) - x.mean(axis=0, dtype=float), compute_uv=False)
        np.testing.assert_allclose(stream.singular_values()[:60], values[:60], rtol=3e-4)
        np.testing.assert_allclose(stream.singular_values()[:10], values[:10], rtol=1e-5)


class TestSplitsAndOddBlocks:
    def test_the_split_into_batches_does_not_change_a_bit(self, make_stream: MakeStream) -> None:
        x = decaying(130, 300, 0.97)
        streams = [feed(make_stream(300, retained_rank=12), x, batch) for batch in (1, 5, 24, 130)]
        for other in streams[1:]:
            np.testing.assert_array_equal(other.modes(), streams[0].modes())
            np.testing.assert_array_equal(other.singular_values(), streams[0].singular_values())

    def test_fewer_snapshots_than_the_rank(self, make_stream: MakeStream) -> None:
        x = decaying(5, 50, 0.5)
        stream = feed(make_stream(50, retained_rank=20), x, 2)
        values = svd(x - x.mean(axis=0), compute_uv=False)
        np.testing.assert_allclose(stream.singular_values()[:4], values[:4], rtol=VALUES)

    def test_a_single_snapshot(self, make_stream: MakeStream) -> None:
        stream = feed(make_stream(50, retained_rank=20), decaying(1, 50, 0.5), 1)
        assert stream.n_applied == 1
        assert stream.singular_values().size == 0

    def test_blocks_of_zeros_and_repeats_add_no_direction(self, make_stream: MakeStream) -> None:
        x = np.zeros((60, 30))
        x[20:40] = decaying(20, 30, 0.7)
        x[40:] = x[39]
        stream = feed(make_stream(30, retained_rank=25, block_length=20), x, 20)
        values = svd(x - x.mean(axis=0), compute_uv=False)
        np.testing.assert_allclose(stream.singular_values()[:5], values[:5], rtol=VALUES)
        assert stream.repeated_snapshots == 39

    def test_more_snapshots_than_rows(self, make_stream: MakeStream) -> None:
        x = decaying(400, 12, 0.8)
        stream = feed(make_stream(12, retained_rank=40), x, 33)
        values = svd(x - x.mean(axis=0), compute_uv=False)
        np.testing.assert_allclose(stream.singular_values(), values, rtol=VALUES)

    def test_a_large_mean_costs_no_digits(self, make_stream: MakeStream) -> None:
        x = decaying(90, 150, 0.9)
        stream = feed(make_stream(150, retained_rank=120, block_length=16), x + 1e6, 9)
        values = svd(x - x.mean(axis=0), compute_uv=False)
        np.testing.assert_allclose(stream.singular_values()[:20], values[:20], rtol=1e-7)
        np.testing.assert_allclose(stream.mean()[0] - 1e6, x.mean(axis=0), atol=1e-8)


class TestKarhunenLoeve:
    """Exact discrete spectra: snapshots [L, -L] sqrt(n) of K = L L' have exactly the covariance K.

    Kernels and continuous spectra: Loeve, Probability Theory II; Ash & Gardner 1975, sec. 1.4 (from memory).
    Discrete eigenvalues of the quadrature: derived, h^2 / (4 sin^2 ...).
    """

    n = 50

    def spectrum(self, make_stream: MakeStream, kernel: np.ndarray, weights: np.ndarray) -> np.ndarray:
        n = len(kernel)
        lower = np.linalg.cholesky(kernel) * np.sqrt(n)
        snapshots = np.concatenate([lower.T, -lower.T])
        np.random.default_rng(11).shuffle(snapshots)
        stream = feed(make_stream(n, weights, retained_rank=n, block_length=30), snapshots, 13)
        values: np.ndarray = stream.singular_values() ** 2 / len(snapshots)
        return values

    def wiener(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        h, k = 1.0 / self.n, np.arange(1, self.n + 1)
        t = h * k
        exact = h**2 / (4 * np.sin((2 * k - 1) * np.pi * h / 4) ** 2)
        return np.minimum.outer(t, t), np.where(k == self.n, h / 2, h), exact

    def test_wiener_process_with_trapezoid_weights(self, make_stream: MakeStream) -> None:
        kernel, weights, exact = self.wiener()
        np.testing.assert_allclose(self.spectrum(make_stream, kernel, weights), exact, rtol=DISCRETE_SPECTRUM)
        np.testing.assert_allclose(exact[:4], [0.4053180695, 0.0450649853, 0.0162447639, 0.0083045311], rtol=1e-8)

    def test_dropping_the_end_weight_is_seen(self, make_stream: MakeStream) -> None:
        kernel, weights, exact = self.wiener()
        wrong = self.spectrum(make_stream, kernel, np.full(self.n, weights[0]))
        assert wrong[0] / exact[0] - 1 > 0.01

    def test_brownian_bridge(self, make_stream: MakeStream) -> None:
        n = 40
        h, k = 1.0 / n, np.arange(1, n)
        t = h * k
        exact = h**2 / (4 * np.sin(k * np.pi * h / 2) ** 2)
        values = self.spectrum(make_stream, np.minimum.outer(t, t) - np.outer(t, t), np.full(n - 1, h))
        np.testing.assert_allclose(values, exact, rtol=DISCRETE_SPECTRUM)
        published = [0.101373283043, 0.025382443562, 0.011310137520, 0.006384915342, 0.004105334745, 0.002867144090]
        np.testing.assert_allclose(values[:6], published, rtol=1e-9)

    def test_exponential_kernel_converges_to_the_published_roots(self, make_stream: MakeStream) -> None:
        """Ghanem & Spanos 1991, Stochastic Finite Elements, sec. 2.3: c = 1, a = 1/2."""
        n = 200
        x = (np.arange(n) + 0.5) / n
        values = self.spectrum(make_stream, np.exp(-np.abs(np.subtract.outer(x, x))), np.full(n, 1.0 / n))
        published = [0.738810809416, 0.138003775354, 0.045088487290, 0.021328931287]
        np.testing.assert_allclose(values[:4], published, rtol=4e-4)

    @pytest.mark.parametrize("weighted", [True, False])
    def test_forgotten_weights_converge_to_wrong_values(self, make_stream: MakeStream, weighted: bool) -> None:
        """Wiener process on the grid xi^2: with equal weights the limit is 0.25544, not 0.40528 (derived)."""
        n = 128
        x = (np.arange(1, n + 1) / n) ** 2
        edges = np.concatenate([[0.0], (x[1:] + x[:-1]) / 2, [1.0]])
        weights = np.diff(edges) if weighted else np.full(n, 1.0 / (n + 1))
        first = self.spectrum(make_stream, np.minimum.outer(x, x), weights)[0]
        assert abs(first - (0.405284734569 if weighted else 0.25544)) < (2e-4 if weighted else 1e-2)
        assert (abs(first / 0.405284734569 - 1) > 0.3) is not weighted


class TestWaves:
    """Travelling and standing waves, closed forms (derived; background: Aubry, Guyonnet & Lima 1991)."""

    nx = 64

    def wave(self, n: int, advance: float, amplitude: float = 1.0, sign: float = 1.0) -> np.ndarray:
        x = 2 * np.pi * np.arange(self.nx) / self.nx
        out: np.ndarray = amplitude * np.cos(3 * x[None, :] - sign * advance * np.arange(n)[:, None])
        return out

    def values(self, make_stream: MakeStream, snapshots: np.ndarray) -> np.ndarray:
        stream = feed(make_stream(self.nx, retained_rank=10, block_length=12), snapshots, 5)
        return stream.singular_values()

    def test_whole_periods(self, make_stream: MakeStream) -> None:
        values = self.values(make_stream, self.wave(48, 2 * np.pi * 5 / 48))
        np.testing.assert_allclose(values[:2], 27.712812921102, rtol=CLOSED_FORM)
        assert (values[2:] < 1e-6).all()

    @pytest.mark.parametrize(
        ("n", "first", "second"),
        [
            (5, 6.121071322718, 1.377026321545),
            (10, 13.544115938431, 7.011905765228),
            (25, 19.806718641279, 19.239357894206),
            (100, 40.354354454823, 39.628484739155),
        ],
    )
    def test_any_length_without_the_mean(self, make_stream: MakeStream, n: int, first: float, second: float) -> None:
        values = self.values(make_stream, self.wave(n, 0.37))
        np.testing.assert_allclose(values[:2], [first, second], rtol=CLOSED_FORM)

    @pytest.mark.parametrize(
        ("n", "first", "second"),
        [(5, 11.069439274968, 6.121071322718), (100, 40.354354454823, 39.642478183566)],
    )
    def test_any_length_with_the_mean(self, make_stream: MakeStream, n: int, first: float, second: float) -> None:
        """The mean counts when each snapshot comes with its negative; energies then are doubled."""
        wave = self.wave(n, 0.37)
        values = self.values(make_stream, np.concatenate([wave, -wave]))
        np.testing.assert_allclose(values[:2], np.sqrt(2) * np.array([first, second]), rtol=CLOSED_FORM)

    def test_standing_wave_has_rank_one(self, make_stream: MakeStream) -> None:
        advance = 2 * np.pi * 5 / 48
        standing = (self.wave(48, advance) + self.wave(48, advance, sign=-1.0)) / 2
        values = self.values(make_stream, standing)
        np.testing.assert_allclose(values[0], 27.712812921102, rtol=CLOSED_FORM)
        assert (values[1:] < 1e-6).all()

    def test_mixture_of_both_directions(self, make_stream: MakeStream) -> None:
        advance = 2 * np.pi * 5 / 48
        mixed = self.wave(48, advance) + self.wave(48, advance, amplitude=0.4, sign=-1.0)
        values = self.values(make_stream, mixed)
        np.testing.assert_allclose(values[:2], [38.797938089543, 16.627687752661], rtol=CLOSED_FORM)

    def test_exactly_degenerate_pairs_by_their_span(self, make_stream: MakeStream) -> None:
        """Poisson kernel on the circle: eigenvalues 1, r, r, r^2, r^2, ... with aliasing (derived)."""
        n, r = 64, 0.6
        angle = 2 * np.pi * np.arange(n) / n
        kernel = (1 - r**2) / (1 - 2 * r * np.cos(np.subtract.outer(angle, angle)) + r**2)
        lower = np.linalg.cholesky(kernel) * np.sqrt(n)
        stream = make_stream(n, np.full(n, 1.0 / n), retained_rank=n, block_length=32)
        feed(stream, np.concatenate([lower.T, -lower.T]), 20)
        exact = [(r**k + r ** (n - k)) / (1 - r**n) for k in (0, 1, 1, 2, 2, 3, 3)]
        np.testing.assert_allclose(stream.singular_values()[:7] ** 2 / (2 * n), exact, rtol=CLOSED_FORM)
        pair = stream.modes(3)[1:, 0]
        fourier = np.stack([np.cos(angle), np.sin(angle)])
        assert subspace_angles(pair.T, fourier.T).max() < 1e-10


class TestEnergyIdentity:
    """Retained plus discarded energy equals the total at every update (derived; orthogonal row spaces)."""

    @pytest.mark.parametrize("dtype", ["float32", "float64"])
    def test_at_every_update(self, make_stream: MakeStream, dtype: str) -> None:
        x = decaying(200, 80, 0.8).astype(dtype) * 10
        stream = make_stream(80, dtype=dtype, retained_rank=10, block_length=20)
        rtol = 1e-12 if dtype == "float64" else 1e-6
        for start in range(0, 200, 20):
            stream.absorb(x[start : start + 20])
            _, arrays = stream.export()
            kept = float((arrays["singular_values"] ** 2).sum())
            np.testing.assert_allclose(kept + stream.discarded_energy, stream.total_energy, rtol=rtol)
        assert stream.discarded_energy > 0

    def test_kept_energies_are_below_the_true_ones_by_at_most_tau(self, make_stream: MakeStream) -> None:
        x = decaying(200, 80, 0.8) * 10
        stream = make_stream(80, retained_rank=10, block_length=20)
        feed(stream, x, 20)
        _, arrays = stream.export()
        truth = svd(x - arrays["datum"], compute_uv=False)[:10] ** 2
        kept = arrays["singular_values"] ** 2
        assert (kept <= truth * (1 + 1e-12)).all()
        assert (truth <= kept + stream.discarded_energy).all()


class TestPublishedData:
    """Singular values of data that packages carry (statsmodels 0.15.0, scikit-learn 1.9.1), column means removed."""

    def values(self, make_stream: MakeStream, x: np.ndarray) -> np.ndarray:
        stream = feed(make_stream(x.shape[1], retained_rank=x.shape[1]), x, 17)
        return stream.singular_values()

    def test_el_nino_years_by_months(self, make_stream: MakeStream) -> None:
        x = el_nino()
        values = self.values(make_stream, x)
        expected = [24.68598246, 11.63544832, 7.24829458, 4.75559444, 3.57607178, 2.35271835]
        np.testing.assert_allclose(values[:6], expected, rtol=1e-8)
        assert abs((values[:3] ** 2).sum() / (values**2).sum() - 0.9326) < 5e-5

    def test_el_nino_months_by_years(self, make_stream: MakeStream) -> None:
        values = self.values(make_stream, el_nino().T)
        expected = [54.27889742, 9.53695536, 6.70224184, 3.73863772, 3.07775133, 2.39596012]
        np.testing.assert_allclose(values[:6], expected, rtol=1e-8)

    def test_el_nino_delay_windows(self, make_stream: MakeStream) -> None:
        series = el_nino().reshape(-1)
        windows = np.lib.stride_tricks.sliding_window_view(series, 24)
        expected = [183.59993483, 181.55805657, 85.31804118, 76.54806840, 51.51662715, 29.93031642]
        np.testing.assert_allclose(self.values(make_stream, windows)[:6], expected, rtol=1e-8)

    def test_digits(self, make_stream: MakeStream) -> None:
        from sklearn.datasets import load_digits

        values = self.values(make_stream, load_digits().data)
        expected = [567.00656650, 542.25185421, 504.63059421, 426.11767608, 353.33503280, 325.82036569]
        np.testing.assert_allclose(values[:6], expected, rtol=1e-9)
        assert abs((values[:3] ** 2).sum() / (values**2).sum() - 0.4030) < 5e-5


def el_nino() -> np.ndarray:
    """Monthly sea surface temperatures 1950-2010, (61, 12)."""
    from statsmodels.datasets import elnino

    months = elnino.load_pandas().data.to_numpy(dtype=float)[:, 1:]
    assert months.shape == (61, 12)
    return months
