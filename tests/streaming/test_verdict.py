"""The verdict from findings and earlier looks, and the clauses one by one."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from streaming.assessment import Context, assess, report
from streaming.declaration import Criterion
from streaming.evidence import Evidence, gather
from streaming.findings import failing_clauses
from streaming.forecast import angle_need, forecast
from streaming.groups import Group
from streaming.hidden import Hidden, hidden_structure
from streaming.looks import GROWTH
from streaming.modal import modal_moments
from streaming.report import State
from streaming.stationarity import Drift, Startup
from streaming.verdict import ANGLE, Finding, Look, agreeing_looks, decide
from tests.streaming.direct_moments import moments_of

GROUPS: tuple[Group, ...] = ((0, 2), (2, 3))
CRITERION = Criterion(n_modes=3, max_angle_deg=10.0)
TOLERANCE = math.sin(math.radians(10.0))


def look(n: int, share: float, groups: tuple[Group, ...] = GROUPS, sound: bool = True) -> Look:
    """A look whose bound is ``share`` of the tolerance."""
    return Look(
        n_snapshots=n, groups=groups, bound_sine=share * TOLERANCE, sound=sound, state=State.UNSETTLED, reasons=()
    )


def evidence_of(n: int = 6400, seed: int = 0) -> Evidence:
    rng = np.random.default_rng(seed)
    return gather(moments_of(rng.standard_normal((n, 12)) * 0.6 ** np.arange(12), 40), CRITERION, 12)


def codes(evidence: Evidence, criterion: Criterion = CRITERION, **context: object) -> set[str]:
    plain = {"n_snapshots": 6400, "block_length": 40, "time_span": 640.0, **context}
    return {f.code for f in failing_clauses(evidence, criterion, Context(**plain))}  # type: ignore[arg-type]


class TestDecide:
    def test_no_failing_clause_and_an_agreeing_look_before(self) -> None:
        found = decide((), 1250, GROUPS, 0.9 * TOLERANCE, (look(1000, 1.05),), CRITERION)
        assert found.state == State.SETTLED
        assert found.settled_since == 1250
        assert "9.0 deg" in found.reasons[0].text

    def test_one_look_is_not_enough(self) -> None:
        found = decide((), 1250, GROUPS, 0.9 * TOLERANCE, (), CRITERION)
        assert found.state == State.UNSETTLED
        assert [reason.code for reason in found.reasons] == ["holding"]

    @pytest.mark.parametrize(
        "before",
        [
            pytest.param(look(1000, 1.2), id="bound too wide even for the record of now"),
            pytest.param(look(1000, 0.9, groups=((0, 3),)), id="other groups"),
            pytest.param(look(1000, 0.9, sound=False), id="another clause failed"),
        ],
    )
    def test_looks_that_disagree(self, before: Look) -> None:
        assert decide((), 1250, GROUPS, 0.9 * TOLERANCE, (before,), CRITERION).state == State.UNSETTLED

    def test_hold_counts_looks(self) -> None:
        looks = (look(640, 1.2), look(800, 1.1), look(1000, 1.0))
        assert agreeing_looks(look(1250, 0.9), looks, 10.0) == 4
        for hold, state in ((4, State.SETTLED), (5, State.UNSETTLED)):
            criterion = Criterion(n_modes=3, hold=hold)
            assert decide((), 1250, GROUPS, 0.9 * TOLERANCE, looks, criterion).state == state

    def test_settled_keeps_its_date_and_is_taken_back(self) -> None:
        first = decide((), 1250, GROUPS, 0.9 * TOLERANCE, (look(1000, 1.0),), CRITERION)
        second = decide((), 1600, GROUPS, 0.8 * TOLERANCE, (look(1000, 1.0), first), CRITERION)
        assert second.settled_since == 1250
        drift = Finding(State.DRIFTING, "drift", "The halves differ.")
        third = decide((drift,), 2000, GROUPS, 0.7 * TOLERANCE, (first, second), CRITERION)
        assert (third.state, third.settled_since, third.sound) == (State.DRIFTING, None, False)

    def test_the_gravest_state_wins_and_all_reasons_are_given(self) -> None:
        findings = (Finding(State.UNSETTLED, ANGLE, "wide"), Finding(State.GATHERING, "few-blocks", "short"))
        found = decide(findings, 100, GROUPS, 0.5, (), CRITERION)
        assert found.state == State.GATHERING
        assert {reason.code for reason in found.reasons} == {ANGLE, "few-blocks"}


class TestClauses:
    def test_a_long_stationary_record_fails_in_none(self) -> None:
        assert codes(evidence_of()) == set()

    def test_each_clause(self) -> None:
        good = evidence_of()
        bad = {
            "start-up": {"startup": Startup(20, True)},
            "drift": {"drift": Drift(1e-5, True)},
            "hidden-structure": {"hidden": Hidden(1.0, 2.0, 0.5)},
            "open-group": {"grouping": dataclasses.replace(good.grouping, open_start=2)},
        }
        for code, change in bad.items():
            assert codes(dataclasses.replace(good, **change)) == {code}

    def test_memory_longer_than_a_block_matters_near_the_tolerance(self) -> None:
        growing = dataclasses.replace(evidence_of(), plateau=1.8)
        assert codes(growing) == set()
        near = Criterion(n_modes=3, max_angle_deg=1.2 * max(m.bound_deg for m in growing.misalignments))
        assert codes(growing, near) == {"long-memory"}

    def test_short_records(self) -> None:
        rng = np.random.default_rng(1)
        short = gather(moments_of(rng.standard_normal((50, 12)) * 0.6 ** np.arange(12), 10), CRITERION, 12)
        assert "few-blocks" in codes(short)
        few = gather(moments_of(rng.standard_normal((80, 12)) * 0.6 ** np.arange(12), 40), CRITERION, 12)
        assert "few-samples" in codes(few)

    def test_criterion_members(self) -> None:
        tight = Criterion(n_modes=3, max_angle_deg=0.5, max_energy_halfwidth=0.001, min_duration=1000.0)
        assert codes(evidence_of(), tight) == {ANGLE, "energy", "min-duration"}

    def test_repeats(self) -> None:
        assert codes(evidence_of(), repeated_snapshots=64) == set()
        assert codes(evidence_of(), repeated_snapshots=65) == {"repeated-snapshots"}


class TestHiddenStructure:
    def outside(self, energy: float, n: int = 2000) -> Hidden:
        """Two modes in the basis, and outside noise of variance 0.02 with one direction of the given energy."""
        rng = np.random.default_rng(2)
        rows = np.sqrt(0.02) * rng.standard_normal((n, 200))
        rows[:, :2] += rng.standard_normal((n, 2)) * [3.0, 2.0]
        moments = moments_of(rows, 40, rank=2)
        rows[:, 7] += np.sqrt(energy) * rng.standard_normal(n)
        masked = moments_of(rows, 40)
        kept = [0, 1, *range(200, 216)]
        cut = dataclasses.replace(
            moments,
            means=masked.means[:, kept],
            scatters=masked.scatters[:, kept][:, :, kept],
            energies=masked.energies,
            probes_basis=masked.probes_basis[:, :2],
            mean_energy=masked.mean_energy,
        )
        return hidden_structure(modal_moments(cut, 2, 200), 2)

    def test_noise_is_no_structure(self) -> None:
        assert not self.outside(0.0).dangerous

    def test_a_masked_direction_is_seen(self) -> None:
        found = self.outside(4.0)
        assert found.dangerous
        assert 0.4 < found.energy / 4.0 < 2.0
        assert found.energy_bound > 4.0


class TestForecast:
    def test_four_times_the_record_halves_the_angle(self) -> None:
        need = angle_need(sampling=0.3, truncation=0.0, tolerance=0.15, freedom=30.0)
        assert need.estimate == pytest.approx(4.0)
        assert need.low < 4.0 < need.high

    def test_truncation_takes_from_the_room(self) -> None:
        assert angle_need(0.3, 0.05, 0.15, 30.0).estimate == pytest.approx(9.0)
        assert angle_need(0.3, 0.2, 0.15, 30.0).estimate >= 1000.0

    def test_it_comes_true(self) -> None:
        """Foreseen at 800 snapshots, against the record at which the bound falls below the tolerance."""
        rng = np.random.default_rng(3)
        rows = rng.standard_normal((12_800, 12)) * 0.8 ** np.arange(12)
        criterion = Criterion(n_modes=2, max_angle_deg=10.0)
        context = Context(n_snapshots=800, block_length=20, time_step=0.5)
        early = assess(moments_of(rows[:800], 40), criterion, context)
        foreseen = early.snapshots_to_go
        assert foreseen is not None
        assert foreseen.time == pytest.approx(0.5 * foreseen.estimate)
        late = gather(moments_of(rows[: 40 * ((800 + foreseen.high) // 40)], 40), criterion, 12)
        assert late.bound_sine <= TOLERANCE
        soon = gather(moments_of(rows[: 40 * ((800 + foreseen.low) // 60)], 40), criterion, 12)
        assert soon.bound_sine > TOLERANCE

    def test_the_last_look_to_hold(self) -> None:
        evidence = evidence_of()
        context = Context(n_snapshots=1000, block_length=40)
        held = look(1000, 0.5, evidence.groups)
        foreseen = forecast(evidence, CRITERION, context, held)
        assert foreseen is not None
        assert foreseen.estimate == math.ceil(1000 * (GROWTH - 1))


class TestBetweenLooks:
    def test_the_verdict_is_that_of_the_last_look(self) -> None:
        moments = moments_of(np.random.default_rng(4).standard_normal((6400, 12)) * 0.6 ** np.arange(12), 40)
        settled = look(5000, 0.5).model_copy(update={"state": State.SETTLED, "settled_since": 5000})
        context = Context(n_snapshots=6400, block_length=40, previous=(settled,), at_look=False)
        tight = Criterion(n_modes=3, max_angle_deg=0.1)
        said = report(assess(moments, tight, context), context)
        assert (said.verdict.state, said.verdict.settled_since) == (State.SETTLED, 5000)
        assert not any(group.settled for group in said.groups)
