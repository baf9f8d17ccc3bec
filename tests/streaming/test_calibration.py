"""The processes have the modes they state, and trials of the stopping rule on them."""

from __future__ import annotations

import numpy as np
import pytest
import typer
from typer.testing import CliRunner

from streaming.calibration.command import register
from streaming.calibration.processes import PROCESSES, kernel_field, waves
from streaming.calibration.summary import Share, summarise
from streaming.calibration.trial import Seen, Trial, angle_deg, outcome, run_trial
from streaming.declaration import Criterion
from streaming.report import State


@pytest.mark.parametrize("name", list(PROCESSES))
def test_the_stated_modes_are_those_of_the_covariance(name: str) -> None:
    process = PROCESSES[name]
    sample = process.draw(1, process.max_snapshots)
    np.testing.assert_allclose(sample.modes @ sample.modes.T, np.eye(len(sample.modes)), atol=1e-10)
    found = np.linalg.svd(sample.snapshots - sample.snapshots.mean(axis=0), full_matrices=False)[2]
    last = max(stop for start, stop in sample.groups if start < process.n_modes)
    assert angle_deg(found, sample.modes, (0, last)) < 12.0


def test_the_same_seed_gives_the_same_record() -> None:
    first, second = (waves(7, 200, 10.0, 0.02, 0.5).snapshots for _ in range(2))
    np.testing.assert_array_equal(first, second)


def test_energies_of_the_kernel() -> None:
    """Exponential covariance, c = 1 on a unit interval: Ghanem & Spanos (1991), from the roots of their equations."""
    rows = kernel_field(1, 40_000, 2.0, 1.0).snapshots
    values = np.linalg.svd(rows, compute_uv=False)[:3] ** 2 / len(rows) / 100
    np.testing.assert_allclose(values * 100, [0.738810809416, 0.138003775354, 0.045088487290], rtol=0.04)


def test_angles_by_their_sine() -> None:
    tilt = 1e-9
    first = np.eye(3)[:2]
    second = np.array([[np.cos(tilt), 0.0, np.sin(tilt)], [0.0, 1.0, 0.0]])
    assert np.radians(angle_deg(first, second, (0, 2))) == pytest.approx(tilt, rel=1e-6)
    assert angle_deg(first, second[:1], (0, 2)) == 90.0


def seen(n: int, state: State, true: float, change: float) -> Seen:
    return Seen(n, state, (12.0,), (true,), true, change)


def test_what_counts_as_a_stop() -> None:
    looks = [
        seen(100, State.GATHERING, 30.0, 90.0),
        seen(125, State.UNSETTLED, 9.0, 5.0),
        seen(157, State.UNSETTLED, 11.0, 5.0),
        seen(197, State.UNSETTLED, 9.0, 5.0),
        seen(247, State.SETTLED, 8.0, 5.0),
    ]
    found = outcome(looks, Criterion(n_modes=1))
    assert (found.stop, found.false_stop, found.oracle) == (247, False, 197)
    assert (found.naive_stop, found.naive_false) == (157, True)
    assert (found.covered, found.n_bounds) == (4, 4)


def test_binomial_interval() -> None:
    """Clopper & Pearson (1934): no event in n gives the upper end 1 - (alpha / 2)^(1 / n)."""
    low, high = Share(0, 60).interval()
    assert low == 0.0
    assert high == pytest.approx(1.0 - 0.025 ** (1 / 60))
    low, high = Share(60, 60).interval()
    assert (low, high) == (pytest.approx(0.025 ** (1 / 60)), 1.0)


def test_summary_of_trials() -> None:
    trials = [
        Trial(300, False, 100, 150, 80, True, 9, 10),
        Trial(200, True, 100, None, 90, False, 5, 10),
        Trial(None, False, 100, 100, None, False, 10, 10),
    ]
    found = summarise(trials)
    assert (found.n_stopped, found.false_stops, found.naive_false_stops) == (2, Share(1, 2), Share(1, 2))
    assert found.ratio == pytest.approx(2.5)
    assert found.coverage == Share(24, 30)


def test_a_trial_is_repeatable_and_beats_the_naive_rule() -> None:
    trials = [run_trial("waves-short", seed) for seed in range(6)]
    assert trials[0] == run_trial("waves-short", 0)
    assert not any(trial.false_stop for trial in trials)
    assert any(trial.naive_false for trial in trials)


def test_the_command_prints_a_row_for_each_process() -> None:
    app = typer.Typer()
    register(app)
    app.command("other")(lambda: None)
    said = CliRunner().invoke(app, ["calibrate", "--runs", "1", "--jobs", "1", "--process", "waves-short"])
    assert said.exit_code == 0, said.output
    assert "waves-short" in said.output
    wrong = CliRunner().invoke(app, ["calibrate", "--process", "no-such-flow"])
    assert wrong.exit_code == 2


@pytest.mark.campaign
@pytest.mark.timeout(3600)
@pytest.mark.parametrize("name", list(PROCESSES))
def test_false_stops_of_the_whole_rule(name: str) -> None:
    """At most 5 % of 100 trials stop too early (6 allowed for chance); the naive rule does so in most."""
    found = summarise([run_trial(name, seed) for seed in range(1000, 1100)])
    assert found.n_stopped >= 85
    assert found.false_stops.count <= 6
    assert found.coverage.fraction >= 0.90
    assert found.lasting_ratio is not None
    assert found.lasting_ratio <= 3.5
    assert found.ratio is not None
    assert found.ratio < 5.0  # 4.69 measured on kernel-close, whose energies lie closest
    assert found.naive_false_stops.fraction > 0.15
