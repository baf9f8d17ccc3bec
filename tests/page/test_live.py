"""The page follows a run: the verdict turns while batches come, and a restart leaves no trace."""

from __future__ import annotations

import signal
import socket
from collections.abc import Callable
from pathlib import Path

import pytest

from tests.page.conftest import Watched, until
from tests.page.posting import declare, post
from tests.service.serving import RunningService

pytestmark = pytest.mark.timeout(120)


def test_the_verdict_turns_settled_live(watch: Callable[..., Watched], service: RunningService) -> None:
    run = declare(service)
    page = watch(service.url).open(f"/runs/{run}")
    page.locator(".verdict.gathering .answer", has_text="No data yet").wait_for()
    post(service, run, 0, 320)
    page.locator(".verdict .answer", has_text="Continue").wait_for()
    page.locator(".verdict .long", has_text="snapshots to go").wait_for()
    assert "deg, tolerated 10" in page.locator(".verdict .holds").inner_text()
    post(service, run, 320, 2000)
    page.locator(".verdict.settled .answer", has_text="May stop").wait_for()
    page.locator(".verdict .long", has_text="settled since snapshot").wait_for()
    assert page.title() == "May stop · mixing duct, half load"
    assert "a person stops the machine" in page.locator(".verdict .caution").inner_text()
    assert page.locator("section.groups tbody tr td:nth-child(2)").all_inner_texts() == ["yes", "yes", "yes"]
    assert service.client.get(f"/v1/runs/{run}").json()["verdict"] == "settled"
    for link in page.locator(".downloads a").all():
        assert service.client.get(link.get_attribute("href")).status_code == 200, link.inner_text()


def test_a_restart_leaves_no_double_points(watch: Callable[..., Watched], tmp_path: Path) -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        port = str(taken.getsockname()[1])
    with RunningService(tmp_path / "data", "--port", port) as first:
        run = declare(first)
        post(first, run, 0, 320)
        page = watch(first.url).open(f"/runs/{run}")
        page.locator(".boundpart .note", has_text="Bound on the misalignment").wait_for()
        first.end(signal.SIGKILL)
        page.locator("#connection.lost", has_text="No connection since").wait_for()
        assert page.locator(".verdict .answer").inner_text() == "Continue"  # what was known stays in view
    with RunningService(tmp_path / "data", "--port", port) as second:
        page.locator("#connection", has_text="Live").wait_for()
        post(second, run, 320, 960)
        looks = second.client.get(f"/v1/runs/{run}/convergence/history").json()["evaluations"]
        wanted = {str(one["n_snapshots"]) for one in looks if one["groups"]}
        assert len(wanted) > 4
        chart = page.locator(".chart.bound")
        until(lambda: wanted <= set(chart.get_attribute("data-places").split()))
        shown = chart.get_attribute("data-places").split()
        assert len(shown) == len(set(shown)) <= len(wanted) + 1  # and the numbers between the looks


@pytest.mark.campaign  # the page waits ten seconds before it believes it
def test_a_frozen_service_is_noticed(watch: Callable[..., Watched], tmp_path: Path) -> None:
    with RunningService(tmp_path / "data") as service:
        run = declare(service)
        page = watch(service.url).open(f"/runs/{run}")
        page.locator(".verdict .answer", has_text="No data yet").wait_for()
        service.process.send_signal(signal.SIGSTOP)
        page.locator("#connection.lost").wait_for(timeout=30_000)
        service.process.send_signal(signal.SIGCONT)
        page.locator("#connection", has_text="Live").wait_for()
        post(service, run, 0, 160)
        page.locator(".intake", has_text="160 snapshots").wait_for()
