"""A real browser over a real service; each test ends with no error in the console and no request to anywhere else."""

from __future__ import annotations

import shutil
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import pytest

from tests.service.serving import RunningService

CHROMIUM = next(
    (found for name in ("chromium", "chromium-browser", "google-chrome") if (found := shutil.which(name))), ""
)
# No sandbox: tests run as root in containers. The rest keeps the browser off the network.
FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
]
WAIT_MILLISECONDS = 15_000


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Say loudly what is missing instead of failing on a machine without a browser."""
    reason = _missing()
    for item in items:
        if reason and Path(__file__).parent in item.path.parents:
            item.add_marker(pytest.mark.skip(reason=reason))


def _missing() -> str:
    try:
        import playwright.sync_api  # noqa: F401
    except ImportError:
        return "page tests need the package playwright: pip install -e '.[test]'"
    return "" if CHROMIUM else "page tests need a browser: apt-get install chromium"


def until(found: Callable[[], Any], seconds: float = WAIT_MILLISECONDS / 1000) -> None:
    """Wait for something to be true; the browser's own waiting by text would need eval, which the page forbids."""
    deadline = time.monotonic() + seconds
    while not found():
        assert time.monotonic() < deadline, f"not within {seconds} s"
        time.sleep(0.05)


class Watched:
    """A page, and everything in it that must not happen."""

    def __init__(self, page: Any, origin: str) -> None:
        self.page, self.origin = page, origin
        self.errors: list[str] = []
        self.foreign: list[str] = []
        self.provoked = "\0"  # what a test provokes on purpose, and the browser rightly reports
        page.on("console", self._spoke)
        page.on("pageerror", lambda error: self.errors.append(f"{error}"))
        page.context.on("request", self._asked)

    def _spoke(self, message: Any) -> None:
        if message.type in ("error", "warning") and self.provoked not in message.text:
            self.errors.append(message.text)

    def _asked(self, request: Any) -> None:
        where = urlsplit(request.url)
        if where.scheme not in ("data", "blob") and f"{where.scheme}://{where.netloc}" != self.origin:
            self.foreign.append(request.url)

    def open(self, address: str = "/") -> Any:
        """Go to an address of the page, and wait until its line to the service stands."""
        self.page.goto(f"{self.origin}/#{address}")
        self.page.locator("#connection", has_text="Live").wait_for()
        return self.page


@pytest.fixture(scope="session")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningService]:
    """A service shared by the tests that do not end it."""
    often = {"SLACKWATER_CHECKPOINT_SHARE": "0.9"}  # at each look, so that short runs have a history to show
    with RunningService(tmp_path_factory.mktemp("page") / "data", environment=often) as running:
        yield running
        assert "Traceback" not in running.log, running.log


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    from playwright.sync_api import sync_playwright

    with sync_playwright() as tool:
        running = tool.chromium.launch(executable_path=CHROMIUM, args=FLAGS, timeout=30_000)
        yield running
        running.close()


@pytest.fixture
def watch(browser: Any) -> Iterator[Callable[..., Watched]]:
    """Make watched pages: ``watch(origin, width=.., height=.., color_scheme=..)``."""
    made: list[Watched] = []

    def make(origin: str, width: int = 1280, height: int = 800, **options: Any) -> Watched:
        context = browser.new_context(viewport={"width": width, "height": height}, **options)
        context.set_default_timeout(WAIT_MILLISECONDS)
        made.append(Watched(context.new_page(), origin))
        return made[-1]

    yield make
    for one in made:
        one.page.context.close()
        assert one.errors == []
        assert one.foreign == []


@pytest.fixture
def page(watch: Callable[..., Watched], service: RunningService) -> Any:
    """A watched page over the shared service, opened at the list of runs."""
    return watch(service.url).open()
