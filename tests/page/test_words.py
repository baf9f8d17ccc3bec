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
        made = run(snapshots_to_go=None if estimate is None else {"estimate": estimate}, **changes)
        return {**made, "declaration": {**made["declaration"], "name": name}}

    points = [
        point("0 deg", verdict="settled"),
        point("2 deg", 500),
        point("4 deg", 300),
        point("6 deg", 10, verdict="gathering"),
        point("8 deg", n_snapshots=0, verdict="gathering"),
        point("10 deg", 900, verdict="drifting"),
        point("12 deg", 200, status="closed"),
    ]
    said = page.evaluate("(runs) => import('/page/campaign.js').then(({ summaryOf }) => summaryOf(runs))", points)
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
    found = page.evaluate("(ls) => import('/page/bounds.js').then(({ marks }) => ls.map((l) => marks(...l)))", limits)
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
