"""Large lists, long histories, and how long a browser works on them."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable

import pytest

from tests.page.conftest import Watched, until
from tests.page.posting import declare, post
from tests.service.serving import RunningService

pytestmark = pytest.mark.timeout(120)

N_POINTS = 10_000
# Goals on a free machine are 1 s and 100 ms; tests run beside others on few cores, and fail at three times that.
SLACK = 3.0


def test_two_hundred_test_points(watch: Callable[..., Watched], service: RunningService) -> None:
    runs = [declare(service, name=f"point {k}", campaign="survey", labels={"speed": k}) for k in range(200)]
    page = watch(service.url).open()
    page.locator("tbody tr", has_text="point 0").first.wait_for(state="attached")
    rows = page.locator("table.runs tbody tr:visible")
    until(lambda: rows.count() >= 200)
    page.get_by_label("Find a run").fill("speed 137")
    until(lambda: rows.count() == 1)
    page.locator(".campaigns a", has_text="survey: 0 of 200 settled").click()
    until(lambda: page.locator(".points .point").count() == 200)
    post(service, runs[41], 0, 160)
    page.locator(".point", has_text="point 41").filter(has_text="160 snapshots").wait_for()
    page.locator(".summary", has_text="0 of 200 settled. Go on with point 41.").wait_for()
    for run in runs:
        service.client.delete(f"/v1/runs/{run}")
    page.locator(".summary", has_text="No run of this campaign").wait_for()


def test_the_first_paint(watch: Callable[..., Watched], service: RunningService) -> None:
    run = declare(service)
    post(service, run, 0, 640)
    began = time.monotonic()
    page = watch(service.url).open(f"/runs/{run}")
    page.locator(".verdict .answer", has_text="Continue").wait_for()
    answered = time.monotonic() - began
    painted = page.evaluate("performance.getEntriesByName('first-contentful-paint')[0].startTime")
    print(f"first paint {painted:.0f} ms, answer in view after {1000 * answered:.0f} ms")
    assert painted < SLACK * 1000


def test_updates_with_ten_thousand_points(watch: Callable[..., Watched], service: RunningService) -> None:
    """Main-thread time of one update of the run view's chart and tables, drawn by the page's own parts."""
    page = watch(service.url).open()
    times = page.evaluate(
        """async (n) => {
            const { BoundSection } = await import("/page/boundsection.js");
            const { energyTable } = await import("/page/energies.js");
            const group = (modes, bound) => ({ modes, angle_deg: bound / 2, angle_bound_deg: bound, settled: false,
                truncation_angle_deg: 0.01, energy_halfwidth: 0.1 });
            const report = (k) => ({ n_snapshots: 16 * (k + 1), total_energy: 1, captured_energy_fraction: 0.9,
                noise_edge: 1e-3, modes: [1, 2, 3, 4].map((mode) => ({ mode, energy_fraction: 0.4 / mode,
                energy_fraction_low: 0.3 / mode, energy_fraction_high: 0.5 / mode })),
                groups: [group([1, 2], 900 / Math.sqrt(k + 1)), group([3], 1200 / Math.sqrt(k + 1)),
                group([4], 700 / Math.sqrt(k + 1))],
                verdict: { snapshots_to_go: { estimate: 16 * k, low: 8 * k, high: 30 * k } } });
            const run = { declaration: { criterion: { max_angle_deg: 5, n_modes: 4 } } };
            const section = new BoundSection();
            document.querySelector("main").replaceChildren(section.root);
            const reports = Array.from({ length: n }, (_, k) => report(k));
            section.show(run, reports);
            await new Promise((done) => setTimeout(done, 300));
            const times = [];
            for (let k = 0; k < 12; k += 1) {
                const began = performance.now();
                reports.push(report(n + k));
                section.show(run, reports);
                document.querySelector("main").append(energyTable(reports[reports.length - 1], 4));
                await new Promise((done) => queueMicrotask(() => queueMicrotask(done))); // the chart draws in one
                document.body.getBoundingClientRect();
                times.push(performance.now() - began);
                await new Promise((done) => requestAnimationFrame(done));
            }
            section.end();
            return times;
        }""",
        N_POINTS,
    )
    print(f"update with {N_POINTS} points: median {statistics.median(times):.1f} ms, largest {max(times):.1f} ms")
    assert statistics.median(times) < SLACK * 100
