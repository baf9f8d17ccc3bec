"""Nothing runs in the page but its own files, and nothing is shown without the token."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import httpx
import pytest

from tests.page.conftest import Watched
from tests.page.posting import declare
from tests.service.serving import RunningService, check_problem

pytestmark = pytest.mark.timeout(120)

TOKEN = "a-token-of-the-tests-0123"


@pytest.mark.parametrize("path", ["/", "/docs", "/problems/busy", "/v1/runs", "/page/app.js", "/nowhere"])
def test_every_answer_carries_the_policy(service: RunningService, path: str) -> None:
    headers = service.client.get(path).headers
    assert headers["content-security-policy"].startswith("default-src 'self';")
    assert "unsafe" not in headers["content-security-policy"]
    assert headers["x-content-type-options"] == "nosniff"
    assert headers["referrer-policy"] == "no-referrer"


def test_the_policy_is_in_force(watch: Callable[..., Watched], service: RunningService) -> None:
    """An inline script, as an attacker would slip in, does not run; the browser reports it."""
    watched = watch(service.url)
    watched.provoked = "Content Security Policy"
    page = watched.open()
    blocked = page.evaluate(
        """() => new Promise((done) => {
            document.addEventListener("securitypolicyviolation", (event) => done(event.effectiveDirective));
            const script = document.createElement("script");
            script.textContent = "window.slipped = true";
            document.body.append(script);
        })"""
    )
    assert blocked == "script-src-elem"
    assert page.evaluate("window.slipped") is None


def test_names_are_text(watch: Callable[..., Watched], service: RunningService) -> None:
    """What a client declares is shown as it was written and never becomes part of the page."""
    name = "<img src=x onerror=alert(1)> duct"
    run = declare(service, name=name, campaign="</h1><b>tunnel</b>", labels={"<i>load</i>": "<script>1</script>"})
    page = watch(service.url).open(f"/runs/{run}")
    page.locator("h1", has_text=name).wait_for()
    page.locator(".run header .labels a", has_text="</h1><b>tunnel</b>").click()
    page.locator(".campaign h1", has_text="</h1><b>tunnel</b>").wait_for()
    assert page.locator("main img, main b, main i, main script").count() == 0
    service.client.delete(f"/v1/runs/{run}")


def test_the_token_is_asked_for_once(watch: Callable[..., Watched], tmp_path: Path) -> None:
    with RunningService(tmp_path / "data", environment={"SLACKWATER_TOKEN": TOKEN}) as service:
        watched = watch(service.url)
        page = watched.page
        page.goto(service.url)
        page.get_by_label("Token").fill("not-the-token-of-it")
        page.get_by_role("button", name="Open").click()
        page.get_by_role("alert").filter(has_text="not the token").wait_for()
        page.get_by_label("Token").fill(TOKEN)
        page.get_by_role("button", name="Open").click()
        page.locator("h1", has_text="Have the leading modes settled?").wait_for()
        page.reload()
        page.locator("#connection", has_text="Live").wait_for()
        assert page.get_by_label("Token").count() == 0
        assert TOKEN not in page.url
        kept = page.evaluate("JSON.stringify([document.cookie, {...localStorage}, {...sessionStorage}])")
        assert kept == '["",{},{}]'
        (cookie,) = page.context.cookies()
        assert (cookie["httpOnly"], cookie["sameSite"]) == (True, "Strict")
        assert TOKEN not in cookie["value"]


def test_the_cookie_reads_and_never_writes(tmp_path: Path) -> None:
    with RunningService(tmp_path / "data", environment={"SLACKWATER_TOKEN": TOKEN}) as service:
        visitor = httpx.Client(base_url=service.url, trust_env=False)
        check_problem(visitor.get("/v1/runs"), 401, "token-needed")
        check_problem(visitor.post("/page/session", json={"token": TOKEN + "x"}), 401, "token-needed")
        answer = visitor.post("/page/session", json={"token": TOKEN})
        assert answer.status_code == 204
        assert re.search("HttpOnly; SameSite=Strict$", answer.headers["set-cookie"])
        assert visitor.get("/v1/runs").json() == {"runs": [], "next": None}
        check_problem(visitor.post("/v1/runs", json={}), 401, "token-needed")
        check_problem(visitor.delete("/v1/runs/x"), 401, "token-needed")
        forged = {"Cookie": answer.headers["set-cookie"].split(";")[0][:-1] + "z"}
        check_problem(httpx.get(f"{service.url}/v1/runs", headers=forged, trust_env=False), 401, "token-needed")
        visitor.close()


@pytest.mark.parametrize("path", ["..%2fsettings.py", "../settings.py", "%2e%2e/settings.py", "vendor", "", "x.js"])
def test_only_files_of_the_page_are_served(service: RunningService, path: str) -> None:
    answer = service.client.get(f"/page/{path}")
    assert answer.status_code == 404, answer.text


def test_files_are_sent_once(service: RunningService) -> None:
    first = service.client.get("/page/app.js")
    assert first.headers["content-type"] == "text/javascript; charset=utf-8"
    again = service.client.get("/page/app.js", headers={"If-None-Match": first.headers["etag"]})
    assert (again.status_code, again.content) == (304, b"")
    assert service.client.get("/").headers["content-type"] == "text/html; charset=utf-8"
