"""The engine as its caller sees it: what it refuses, what it keeps, and that it goes on where it was."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path
from typing import ClassVar

import numpy as np
import pytest

from streaming import (
    CheckpointError,
    ClosedError,
    DeclarationError,
    NotReadyError,
    SnapshotError,
    SnapshotStream,
    State,
)
from tests.streaming.conftest import MakeStream, declaration

RNG = np.random.default_rng(8)


def field(n: int, n_points: int = 60, seed: int = 1) -> np.ndarray:
    """Three travelling pairs in weak noise."""
    rng = np.random.default_rng(seed)
    x, t = np.arange(n_points) / n_points, np.arange(n)[:, None]
    waves = sum(np.cos(2 * np.pi * (k * x - 0.013 * k * t) + k) / k for k in (1, 2, 3))
    out: np.ndarray = waves + 0.05 * rng.standard_normal((n, n_points))
    return out


class TestRefusals:
    @pytest.mark.parametrize(
        ("batch", "says"),
        [
            (np.zeros((2, 59)), "(n, 1, 60)"),
            (np.zeros(60), "shape"),
            (np.zeros((2, 60), dtype=np.int64), "floating point"),
            (np.zeros((2, 60), dtype=complex), "floating point"),
            (np.full((2, 60), np.nan), "first in field 'p' at point 0"),
        ],
    )
    def test_a_wrong_batch_is_refused_whole(self, make_stream: MakeStream, batch: np.ndarray, says: str) -> None:
        stream = make_stream(60)
        stream.absorb(field(3))
        with pytest.raises(SnapshotError) as error:
            stream.absorb(batch)
        assert says in str(error.value)
        assert stream.n_snapshots == 3

    def test_one_infinite_value_is_located(self, make_stream: MakeStream) -> None:
        stream = make_stream(30, fields=[{"name": "u"}, {"name": "v"}])
        batch = np.zeros((4, 2, 30))
        batch[2, 1, 17] = np.inf
        with pytest.raises(SnapshotError, match=r"snapshot 2 .* field 'v' at point 17"):
            stream.absorb(batch)

    def test_values_too_large_for_float32(self, make_stream: MakeStream) -> None:
        with pytest.raises(SnapshotError, match="too large for float32"):
            make_stream(60, dtype="float32").absorb(np.full((1, 60), 1e39))

    @pytest.mark.parametrize("times", [[0.0], [0.0, 0.0], [1.0, np.nan], [2.0, 1.0]])
    def test_times_must_fit_and_increase(self, make_stream: MakeStream, times: list[float]) -> None:
        with pytest.raises(SnapshotError, match="time"):
            make_stream(60).absorb(field(2), times)

    def test_times_go_on_over_batches(self, make_stream: MakeStream) -> None:
        stream = make_stream(60)
        stream.absorb(field(2), [0.0, 5.0])
        with pytest.raises(SnapshotError, match="the one before 5"):
            stream.absorb(field(1), [4.0])

    def test_after_close(self, make_stream: MakeStream) -> None:
        stream = make_stream(60)
        stream.absorb(field(3))
        stream.close()
        with pytest.raises(ClosedError):
            stream.absorb(field(1))
        assert stream.n_applied == 3

    def test_nothing_to_read_yet(self, make_stream: MakeStream) -> None:
        stream = make_stream(60)
        stream.absorb(field(3))
        for read in (stream.convergence, stream.modes, stream.mean, stream.singular_values, stream.coefficients):
            with pytest.raises(NotReadyError, match="3 of 80"):
                read()

    def test_declarations(self) -> None:
        for changes, says in (
            ({"colour": "blue"}, "colour"),
            ({"fields": []}, "fields"),
            ({"criterion": {"n_modes": 60}}, "below the rank"),
            ({"grid": {"kind": "uniform", "shape": [7, 9], "spacing": [1, 1]}}, "63 points"),
            ({"fields": [{"name": "a/b"}]}, "pattern"),
        ):
            with pytest.raises(DeclarationError, match=says):
                SnapshotStream(declaration(60, **changes))

    @pytest.mark.parametrize("weights", [np.ones(59), np.zeros(60), np.full(60, np.nan), -np.ones(60)])
    def test_weights(self, weights: np.ndarray) -> None:
        with pytest.raises(DeclarationError, match="weights"):
            SnapshotStream(declaration(60), weights)


class TestGoingOn:
    @pytest.mark.parametrize("cut", [5, 48, 100, 131])
    def test_a_loaded_stream_gives_the_same_bits(self, make_stream: MakeStream, tmp_path: Path, cut: int) -> None:
        x = field(200)
        whole = make_stream(60, retained_rank=12)
        for start in range(0, 200, 10):
            whole.absorb(x[start : start + 10])
        first = make_stream(60, retained_rank=12)
        first.absorb(x[:cut])
        first.save(tmp_path / "checkpoint")
        second = SnapshotStream.load(tmp_path / "checkpoint")
        second.absorb(x[cut:])
        np.testing.assert_array_equal(second.modes(), whole.modes())
        np.testing.assert_array_equal(second.mean(), whole.mean())
        assert second.convergence() == whole.convergence()
        assert second.history == whole.history
        for ours, theirs in zip(second.coefficients(), whole.coefficients(), strict=True):
            np.testing.assert_allclose(ours, theirs, atol=1e-12)

    def test_weights_scales_and_positions_come_along(self, make_stream: MakeStream, tmp_path: Path) -> None:
        weights = RNG.uniform(1, 2, 60)
        positions = RNG.uniform(0, 1, (60, 2))
        stream = SnapshotStream(
            declaration(60, grid={"kind": "points"}, scaling="unit-variance", retained_rank=12), weights, positions
        )
        stream.absorb(field(50))
        stream.save(tmp_path / "a")
        again = SnapshotStream.load(tmp_path / "a")
        np.testing.assert_array_equal(again.positions, positions)
        np.testing.assert_array_equal(again.modes(), stream.modes())

    def test_results_do_not_depend_on_the_number_of_threads(self, tmp_path: Path) -> None:
        script = (
            "import sys, numpy as np; from streaming import SnapshotStream\n"
            "rng = np.random.default_rng(4)\n"
            "d = dict(name='t', n_points=90_000, fields=[dict(name='u')], retained_rank=8, criterion=dict(n_modes=2))\n"
            "s = SnapshotStream(d)\n"
            "for _ in range(4): s.absorb(rng.standard_normal((16, 90_000), dtype=np.float32))\n"
            "np.save(sys.argv[1], s.modes())\n"
        )
        for threads in ("1", "3"):
            environment = {**os.environ, "SLACKWATER_THREADS": threads, "OPENBLAS_NUM_THREADS": threads}
            command = [sys.executable, "-c", script, str(tmp_path / f"{threads}.npy")]
            subprocess.run(command, env=environment, check=True, timeout=120)
        np.testing.assert_array_equal(np.load(tmp_path / "1.npy"), np.load(tmp_path / "3.npy"))


class TestNeverSettledTooEarly:
    CRITERION: ClassVar = {"n_modes": 2, "max_angle_deg": 20.0}

    def states(self, stream: SnapshotStream) -> list[State]:
        return [report.verdict.state for report in stream.history]

    def test_waves_that_go_on_do_settle(self, make_stream: MakeStream) -> None:
        stream = make_stream(60, retained_rank=12, criterion=self.CRITERION)
        stream.absorb(field(3000))
        assert self.states(stream)[-1] == State.SETTLED
        assert stream.convergence().groups[0].modes == [1, 2]

    def test_a_settled_verdict_does_not_flicker(self, make_stream: MakeStream) -> None:
        """Modes 2 and 3 are nearly equal: one group when it settles, taken apart by a longer record."""
        rng = np.random.default_rng(21)
        structures = np.linalg.qr(rng.standard_normal((60, 4)))[0].T * np.array([[8.0], [4.0], [3.75], [1.0]])
        for seed in range(2):
            amplitudes = np.random.default_rng(seed).standard_normal((12_000, 4))
            stream = make_stream(60, retained_rank=8, criterion={"n_modes": 2, "max_angle_deg": 12.0})
            stream.absorb(amplitudes @ structures + 0.3 * rng.standard_normal((12_000, 60)))
            states = self.states(stream)
            first = states.index(State.SETTLED)
            assert set(states[first:]) == {State.SETTLED}
            groups = [[group.modes for group in report.groups] for report in stream.history[first:]]
            assert all(later == groups[0] for later in groups)

    def test_ten_snapshots(self, make_stream: MakeStream) -> None:
        stream = make_stream(60, retained_rank=12, criterion=self.CRITERION)
        stream.absorb(field(10))
        stream.close()
        assert self.states(stream) == [State.GATHERING]

    @pytest.mark.parametrize("n_alive", [1, 200, 700])
    def test_a_frozen_solver(self, make_stream: MakeStream, n_alive: int) -> None:
        """The same snapshot again and again looks like perfect agreement."""
        x = field(n_alive)
        stream = make_stream(60, retained_rank=12, criterion=self.CRITERION)
        stream.absorb(np.concatenate([x, np.repeat(x[-1:], 4000 - n_alive, axis=0)]))
        frozen = [
            report for report in stream.history if report.n_snapshots > n_alive + stream.declaration.length_of_block
        ]
        assert len(frozen) >= 7
        assert State.SETTLED not in [report.verdict.state for report in frozen]
        assert stream.repeated_snapshots == 4000 - n_alive

    def test_a_pure_transient(self, make_stream: MakeStream) -> None:
        """A flow that only decays towards rest, and one that only grows."""
        t = np.linspace(0, 3, 3000)[:, None]
        for factor in (np.exp(-t), np.exp(t)):
            stream = make_stream(60, retained_rank=12, criterion=self.CRITERION)
            stream.absorb(field(3000) * factor)
            assert State.SETTLED not in self.states(stream)

    def test_a_masked_mode(self, make_stream: MakeStream) -> None:
        """5 e1, e2, then 400 times 0.5 e3 in R^6: plain truncation to rank 2 in short blocks loses the largest mode."""
        x = np.zeros((402, 6))
        x[0, 0], x[1, 1], x[2:, 2] = 5.0, 1.0, 0.5
        x = np.concatenate([x, -x])  # no mean, so that the third direction is a fluctuation
        stream = make_stream(6, retained_rank=2, block_length=2, criterion={"n_modes": 1})
        stream.absorb(x)
        stream.close()
        assert State.SETTLED not in self.states(stream)

    def test_min_duration_is_kept(self, make_stream: MakeStream) -> None:
        criterion = {**self.CRITERION, "min_duration": 1e6}
        stream = make_stream(60, retained_rank=12, criterion=criterion)
        stream.absorb(field(3000))
        assert State.SETTLED not in self.states(stream)
        assert "1e+06" in str(stream.convergence().verdict.reasons) or "1000000" in str(
            stream.convergence().verdict.reasons
        )


class TestCheckpoints:
    def saved(self, make_stream: MakeStream, path: Path) -> SnapshotStream:
        grid = {"kind": "uniform", "shape": [6, 10], "spacing": [0.1, 0.2]}
        stream = make_stream(60, retained_rank=12, grid=grid, fields=[{"name": "u", "unit": "m/s"}])
        stream.absorb(field(150))
        stream.save(path)
        return stream

    def test_xarray_reads_it(self, make_stream: MakeStream, tmp_path: Path) -> None:
        import xarray

        stream = self.saved(make_stream, tmp_path / "c")
        with xarray.open_zarr(tmp_path / "c" / "fields.zarr", consolidated=False) as data:
            assert data["mode_u"].dims == ("mode", "y", "x")
            assert data["mean_u"].attrs["units"] == "m/s"
            np.testing.assert_allclose(data["x"], 0.2 * np.arange(10))
            np.testing.assert_allclose(data["mode_u"].values[0].ravel(), stream.modes(1).ravel(), atol=1e-14)
            assert data["coefficient"].dims == ("time", "mode")

    def test_nothing_is_overwritten(self, make_stream: MakeStream, tmp_path: Path) -> None:
        stream = self.saved(make_stream, tmp_path / "c")
        with pytest.raises(CheckpointError, match="exists already"):
            stream.save(tmp_path / "c")

    def test_every_damaged_file_is_named(self, make_stream: MakeStream, tmp_path: Path) -> None:
        self.saved(make_stream, tmp_path / "c")
        files = [f for f in (tmp_path / "c").rglob("*") if f.is_file()]
        assert len(files) > 20
        for file in files:
            good = file.read_bytes()
            middle = len(good) // 2
            for bad in (good[:middle] + bytes([good[middle] ^ 1]) + good[middle + 1 :], good[:-1], None):
                file.unlink() if bad is None else file.write_bytes(bad)
                if file.name == "manifest.json" and bad is not None:
                    continue  # a changed manifest is itself not listed; a truncated one is caught below
                with pytest.raises(CheckpointError, match=file.name.replace(".", r"\.")):
                    SnapshotStream.load(tmp_path / "c")
            file.write_bytes(good)
        SnapshotStream.load(tmp_path / "c")


class TestSpectra:
    def test_peaks_of_travelling_pairs_and_their_strouhal_number(self, make_stream: MakeStream) -> None:
        stream = make_stream(
            60,
            retained_rank=12,
            time={"unit": "s", "step": 0.02},
            reference={"length": 0.1, "speed": 2.0},
            criterion={"n_modes": 4, "max_angle_deg": 20.0},
        )
        stream.absorb(field(3000))
        stream.close()
        for mode, wave in zip(stream.convergence().modes, (1, 1, 2, 2), strict=True):
            assert mode.peak_frequency == pytest.approx(0.013 * wave / 0.02, rel=0.02)
            assert mode.strouhal == pytest.approx(mode.peak_frequency * 0.05)
