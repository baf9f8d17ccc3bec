"""The words and numbers of the page, against those of the terminal and against closed forms."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from service.verdict_text import two_digits
from tests.service.serving import npy

pytestmark = pytest.mark.timeout(120)


def run(**changes: Any) -> dict[str, Any]:
    declaration = {"time": {"unit": "s"}, "criterion": {"max_angle_deg": 10}, "name": "air intake"}
    return {"status": "open", "verdict": "unsettled", "advice": "continue", "n_snapshots": 100, "reason": None,
            "snapshots_to_go": None, "declaration": declaration, **changes}  # fmt: skip


def test_forecasts_are_rounded_as_in_the_terminal(page: Any) -> None:
    # Exact ties are left out: the two languages round 225 differently, and a forecast is not worth it.
    numbers = sorted({n for k in range(140) if str(n := int(10 ** (k / 17))).rstrip("0")[2:] != "5"})
    shown = page.evaluate("(ns) => import('/page/words.js').then(({ rough }) => ns.map(rough))", numbers)
    assert shown == [two_digits(n) for n in numbers]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({}, "Continue"),
        ({"n_snapshots": 0}, "No data yet"),
        ({"verdict": "settled", "advice": "may stop"}, "May stop"),
        ({"verdict": "drifting"}, "Continue"),
        ({"verdict": "settled", "advice": "may stop", "status": "closed"}, "Settled"),
        ({"status": "closed"}, "Not settled"),
        ({"status": "failed", "verdict": "settled", "advice": "may stop"}, "Failed"),
    ],
)
def test_the_answer(page: Any, changes: dict[str, Any], words: str) -> None:
    assert page.evaluate("(run) => import('/page/words.js').then(({ answer }) => answer(run))", run(**changes)) == words


def test_the_summary_names_what_to_run_next(page: Any) -> None:
    def point(name: str, estimate: int | None = None, **changes: Any) -> dict[str, Any]:
        return run(name=name, snapshots_to_go=None if estimate is None else {"estimate": estimate}, **changes)

    points = [
        point("0 deg", verdict="settled"),
        point("2 deg", 500),
        point("4 deg", 300),
        point("6 deg", 10, verdict="gathering"),
        point("8 deg", n_snapshots=0, verdict="gathering"),
        point("10 deg", 900, verdict="drifting"),
        point("12 deg", 200, status="closed"),
    ]
    said = page.evaluate("(points) => import('/page/campaign.js').then(({ summaryOf }) => summaryOf(points))", points)
    assert said == "1 of 7 settled. Drifting: 10 deg. Go on with 4 deg. Ended too early: 12 deg."


def test_what_is_strange_is_said(page: Any) -> None:
    still = {"drifting": True, "drift_p_value": 0.0012, "startup_in_doubt": False, "repeated_snapshots": 1200}
    said = page.evaluate(
        "([run, report]) => import('/page/health.js').then(({ strange }) => strange(run, report, 130))",
        [run(waiting={"missing_sequence": 7, "n_batches": 3}), {"stationarity": still}],
    )
    assert said == [
        "Batch 7 is missing; what came after it waits.",
        "No new snapshot for 2 min.",
        "The record drifts (p = 0.0012).",
        "1,200 snapshots repeat the one before.",
    ]


def test_marks_of_a_logarithmic_axis(page: Any) -> None:
    limits = [[14.8, 1400.0], [7.0, 40.0], [3e2, 4e7]]
    found = page.evaluate("(ls) => import('/page/chart.js').then(({ marks }) => ls.map((l) => marks(...l)))", limits)
    assert found[0] == [20, 50, 100, 200, 500, 1000]
    assert found[2] == [1e3, 1e4, 1e5, 1e6, 1e7]
    for (low, high), ticks in zip(limits, found, strict=True):
        assert all(low <= tick <= high for tick in ticks)
        assert len(ticks) >= 4


def test_npy_of_all_kinds_is_read(page: Any) -> None:
    values = np.array([[1.5, -2.25, math.pi], [0.0, 1e-30, -7e5]])
    for kind in ("<f4", ">f4", "<f8", ">f8"):
        read = page.evaluate(
            """(bytes) => import("/page/npy.js").then(({ parseNpy }) => {
                const { shape, values } = parseNpy(Uint8Array.from(bytes).buffer); return [shape, [...values]]; })""",
            list(npy(values.astype(kind))),
        )
        assert read[0] == [2, 3]
        assert read[1] == values.astype(np.float32).ravel().tolist()


@pytest.mark.parametrize(
    ("sampling", "ending"),
    [
        (None, "; the bounds of the points are not known yet."),
        (12.0, ", more than the 12\u202fdeg that sampling may account for."),
        (40.0, ", within the 40\u202fdeg that sampling alone may account for."),
    ],
)
def test_a_comparison_is_held_against_its_sampling(page: Any, sampling: float | None, ending: str) -> None:
    found = {"n_modes": 4, "angle_deg": 25.31, "sampling_deg": sampling}
    said = page.evaluate("(found) => import('/page/compare.js').then((part) => part.comparedWords(found))", found)
    assert said == f"The leading 4 modes lie 25.3\u202fdeg apart{ending}"


def test_another_tolerance(page: Any) -> None:
    """The sampling part falls like the inverse square root of the record: half the sine takes four times as long."""
    double = math.degrees(math.asin(2 * math.sin(math.radians(5))))
    group = {"modes": [1, 2], "angle_bound_deg": double, "truncation_angle_deg": 0.0}
    easy = {"modes": [3], "angle_bound_deg": 1.0, "truncation_angle_deg": 0.0}
    report = {"n_snapshots": 1000, "groups": [easy, group]}
    cut = {"n_snapshots": 1000, "groups": [{**group, "truncation_angle_deg": 6.0}]}
    script = """([report, cut]) => import("/page/whatif.js").then(({ recordNeeded }) =>
        [recordNeeded(report, 5), recordNeeded(report, 40), recordNeeded(cut, 5)])"""
    tight, loose, never = page.evaluate(script, [report, cut])
    assert tight["total"] == pytest.approx(4000)
    assert tight["group"]["modes"] == [1, 2]
    assert loose["total"] < 1000
    assert never is None
