"""The page without a mouse, without colours and without eyes; on a phone, on a wall and on paper."""

from __future__ import annotations

import time
from collections.abc import Callable
from importlib.resources import files
from typing import Any

import pytest

from tests.page.conftest import Watched
from tests.page.posting import declare, post
from tests.service.serving import RunningService

pytestmark = pytest.mark.timeout(120)

VIEWS = ("/", "/runs/{run}", "/campaigns/mixing%20duct%2C%20spring")


@pytest.fixture(scope="module")
def run(service: RunningService) -> str:
    strict = {"n_modes": 4, "max_angle_deg": 3}  # far from settled at the end of what is posted
    made = declare(service, campaign="mixing duct, spring", name="mixing duct, quarter load", criterion=strict)
    for start in range(0, 960, 240):
        post(service, made, start, start + 240)
        time.sleep(0.3)  # a checkpoint waits for about as long as the one before took
    assert len(service.client.get(f"/v1/runs/{made}/checkpoints").json()["checkpoints"]) > 1
    return made


@pytest.fixture(scope="module")
def axe() -> str:
    """The rules of axe-core (Deque, MPL-2.0), as a package of the tests carries them."""
    try:
        return (files("axe_playwright_python") / "axe.min.js").read_text()
    except ModuleNotFoundError:
        pytest.skip("accessibility rules need the package axe-playwright-python: pip install -e '.[test]'")


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("view", VIEWS)
def test_the_rules_of_axe(
    watch: Callable[..., Watched], service: RunningService, run: str, axe: str, view: str, scheme: str
) -> None:
    page = watch(service.url, color_scheme=scheme, bypass_csp=True).open(view.format(run=run))
    _settle(page)
    page.evaluate(axe)
    assert _violations(page) == []


@pytest.mark.parametrize("path", ["/docs", "/problems/busy"])
def test_the_plain_pages(watch: Callable[..., Watched], service: RunningService, axe: str, path: str) -> None:
    page = watch(service.url, bypass_csp=True).page
    page.goto(f"{service.url}{path}")
    page.evaluate(axe)
    assert _violations(page) == []


def _violations(page: Any) -> list[Any]:
    tags = ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa", "best-practice"]
    found = page.evaluate("(tags) => axe.run({ runOnly: tags })", tags)
    return [(one["id"], [node["html"] for node in one["nodes"]]) for one in found["violations"]]


def test_a_walk_with_the_keyboard(watch: Callable[..., Watched], service: RunningService, run: str) -> None:
    page = watch(service.url).open()
    page.locator("main a", has_text="mixing duct, quarter load").wait_for()
    page.keyboard.press("Tab")
    assert _focused(page) == "Skip to the content"
    page.keyboard.press("Enter")
    page.keyboard.press("Tab")
    assert "mixing duct, spring" in _focused(page)
    page.keyboard.press("Enter")
    page.locator(".points a", has_text="quarter load").wait_for()
    page.keyboard.press("Tab")
    assert "quarter load" in _focused(page)
    page.keyboard.press("Enter")
    page.locator(".verdict .answer", has_text="Continue").wait_for()
    _settle(page)
    seen = _walk(page, 25)
    assert {"Field u (m/s)", "Checkpoint", "Verdict and numbers (JSON)", "Operations"} <= set(seen), seen
    page.get_by_label("u (m/s)").focus()
    page.keyboard.press("ArrowRight")
    page.locator(".picture canvas[aria-label*='Mode 1, v,']").wait_for()


def test_the_slider_moves_with_the_keyboard(watch: Callable[..., Watched], service: RunningService, run: str) -> None:
    page = watch(service.url).open(f"/runs/{run}")
    _settle(page)
    slider = page.get_by_label("Checkpoint")
    slider.focus()
    assert slider.get_attribute("aria-valuetext").endswith("(newest)")
    page.keyboard.press("Home")
    oldest = service.client.get(f"/v1/runs/{run}/checkpoints").json()["checkpoints"][-1]["n_snapshots"]
    page.locator(f".picture canvas[aria-label*='at {oldest} snapshots']").first.wait_for()
    assert slider.get_attribute("aria-valuetext") == f"{oldest} snapshots"


@pytest.mark.parametrize(("width", "height"), [(320, 640), (390, 844), (768, 1024), (1920, 1080), (3840, 2160)])
def test_nothing_is_cut_off(
    watch: Callable[..., Watched], service: RunningService, run: str, width: int, height: int
) -> None:
    """No sideways scrolling of the page at any width (WCAG 2.2, 1.4.10 Reflow: down to 320 px)."""
    page = watch(service.url, width=width, height=height).open()
    for view in VIEWS:
        page.goto(f"{service.url}/#{view.format(run=run)}")
        _settle(page)
        assert page.evaluate("document.documentElement.scrollWidth - innerWidth") <= 0, view


def test_the_answer_is_read_from_three_metres(watch: Callable[..., Watched], service: RunningService, run: str) -> None:
    """Letters of 20 mm or more on a 55-inch screen (1218 mm over 1920 px): 1/150 of three metres (common practice)."""
    page = watch(service.url, width=1920, height=1080).open(f"/runs/{run}")
    _settle(page)
    pixels = page.evaluate(
        """() => { const found = document.querySelector(".verdict .answer");
            const pen = document.createElement("canvas").getContext("2d");
            pen.font = getComputedStyle(found).font;
            return pen.measureText("x").actualBoundingBoxAscent; }"""
    )
    assert pixels * 1218 / 1920 >= 20
    assert page.locator(".verdict .answer").bounding_box()["y"] < 540


def test_it_prints(watch: Callable[..., Watched], service: RunningService, run: str) -> None:
    page = watch(service.url).open(f"/runs/{run}")
    _settle(page)
    page.emulate_media(media="print")
    for chart in page.locator(".chart canvas").all():  # nothing is cut off on a narrower sheet
        page.set_viewport_size({"width": 700, "height": 900})
        assert chart.bounding_box()["width"] > 150
        frame = chart.evaluate("(canvas) => canvas.closest('.chart').getBoundingClientRect().right")
        assert chart.bounding_box()["x"] + chart.bounding_box()["width"] <= frame + 1
    assert page.locator("#theme").is_hidden()
    assert page.locator(".verdict .answer").is_visible()
    assert len(page.pdf()) > 10_000


def _settle(page: Any) -> None:
    """Wait until the view shows its data."""
    page.locator("main a, .verdict.unsettled").first.wait_for()
    if "/runs/" in page.url:
        page.locator(".picture canvas[aria-label*='Mode 1,']").wait_for()
        page.locator(".chart.bound canvas").wait_for()


def _walk(page: Any, steps: int) -> list[str]:
    names = []
    for _ in range(steps):
        page.keyboard.press("Tab")
        names.append(_focused(page))
    return names


def _focused(page: Any) -> str:
    """What has the focus, by its label or its text; it must be seen to have it."""
    name, ring = page.evaluate(
        """() => { const one = document.activeElement;
            const label = one.labels?.length ? one.labels[0].innerText.trim() : "";
            const set = one.closest("fieldset")?.querySelector("legend")?.innerText;
            const named = [set, label].filter(Boolean).join(" ") || one.getAttribute("aria-label");
            const name = named || one.innerText || one.tagName;
            return [name, one === document.body ? "solid" : getComputedStyle(one).outlineStyle]; }"""
    )
    assert ring == "solid", name
    return str(name).split("\n")[0]
