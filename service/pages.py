"""Pages for people, made here and complete in themselves: the runs, the operations, the problem types."""

from __future__ import annotations

import json
from html import escape
from typing import Any

from service.answers import RunResource
from service.board import Published
from service.problems import CATALOGUE

CAUTION = (
    "Settled modes mean that the sampling of what was recorded suffices. They say nothing of mesh, time step, "
    "turbulence model, wall interference, calibration or of states that the run has not visited. Not for "
    "certification, load cases or safety decisions without licensed practice and the local codes. Never wire the "
    "verdict to an interlock or let it drive a rig: a person stops the machine."
)

_STYLE = """
:root { color-scheme: light dark; font: 16px/1.5 system-ui, sans-serif; }
body { max-width: 60rem; margin: 2rem auto; padding: 0 1rem; }
table { border-collapse: collapse; width: 100%; } th, td { text-align: left; padding: .4rem .6rem .4rem 0;
border-bottom: 1px solid #8886; vertical-align: top; } code { font-size: .9em; } .note { opacity: .8; font-size: .9em; }
h2 { margin-top: 2rem; } .state { font-weight: 600; }
"""


def page(title: str, body: str, refresh_seconds: int | None = None) -> str:
    """A whole document."""
    refresh = f'<meta http-equiv="refresh" content="{refresh_seconds}">' if refresh_seconds else ""
    return (
        '<!doctype html><html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f"{refresh}<title>{escape(title)}</title><style>{_STYLE}</style></head><body>{body}</body></html>"
    )


def runs_page(runs: list[tuple[RunResource, Published]], version: str) -> str:
    """All runs with their verdicts."""
    head = "<tr><th>Run</th><th>Verdict</th><th>May it stop?</th><th>Snapshots</th><th>Still to go</th></tr>"
    rows = "".join(_run_row(run, published) for run, published in runs)
    table = f"<table>{head}{rows}</table>" if runs else "<p>No run has been declared yet.</p>"
    return page(
        "Slackwater",
        f"<h1>Slackwater</h1><p>Have the leading modes settled?</p>{table}"
        f'<p class="note">{escape(CAUTION)}</p><p class="note">Version {escape(version)}. '
        '<a href="/docs">Operations</a>, <a href="/openapi.json">OpenAPI</a>, <a href="/metrics">metrics</a>.</p>',
        refresh_seconds=5,
    )


def _run_row(run: RunResource, published: Published) -> str:
    name, address = escape(run.declaration.name), f"/v1/runs/{escape(run.id)}"
    why = "; ".join(_reasons(published)) if run.status != "failed" else f"failed: {run.reason}"
    advice = run.advice if run.status == "open" else run.status
    waiting = f"; waits for batch {run.waiting.missing_sequence}" if run.waiting else ""
    return (
        f'<tr><td><a href="{address}">{name}</a></td>'
        f'<td><span class="state">{escape(run.verdict)}</span> <span class="note">{escape(why)}</span></td>'
        f"<td>{escape(advice)}</td><td>{run.n_applied} of {run.n_snapshots} applied{waiting}</td>"
        f"<td>{_to_go(published)}</td></tr>"
    )


def _reasons(published: Published) -> list[str]:
    if published.report is None:
        return ["the first block is not full yet"]
    return [reason["text"] for reason in json.loads(published.report)["verdict"]["reasons"]]


def _to_go(published: Published) -> str:
    to_go = published.snapshots_to_go
    return "" if to_go is None else f"{to_go['estimate']} ({to_go['low']} to {to_go['high']})"


def docs_page(description: dict[str, Any]) -> str:
    """Every operation of an OpenAPI description, with what goes in and what comes out."""
    parts = [
        f"<h1>{escape(description['info']['title'])} {escape(description['info']['version'])}</h1>"
        f"<p>{escape(description['info'].get('description', ''))}</p>"
        '<p>The whole description for machines: <a href="/openapi.json">openapi.json</a>.</p>'
    ]
    for path, operations in description["paths"].items():
        parts.extend(_operation(method, path, operation) for method, operation in operations.items())
    parts.append("<h2>Problem types</h2>" + _problem_table())
    return page("Slackwater: operations", "".join(parts))


def _operation(method: str, path: str, operation: dict[str, Any]) -> str:
    text = escape(operation.get("description") or operation.get("summary", ""))
    inputs = "".join(_parameter(one) for one in operation.get("parameters", []))
    body = operation.get("requestBody")
    if body:
        types = ", ".join(body["content"])
        inputs += f"<tr><td>body</td><td>{escape(types)}</td><td>{escape(body.get('description', ''))}</td></tr>"
    answers = ", ".join(f"{status} {escape(one['description'])}" for status, one in operation["responses"].items())
    table = f"<table><tr><th>Input</th><th>Where</th><th>Meaning</th></tr>{inputs}</table>" if inputs else ""
    return (
        f"<h2><code>{method.upper()} {escape(path)}</code></h2><p>{text}</p>{table}"
        f'<p class="note">Answers: {answers}</p>'
    )


def _parameter(parameter: dict[str, Any]) -> str:
    needed = " (needed)" if parameter.get("required") else ""
    meaning = parameter.get("description", "")
    return (
        f"<tr><td><code>{escape(parameter['name'])}</code>{needed}</td><td>{parameter['in']}</td>"
        f"<td>{escape(meaning)}</td></tr>"
    )


def _problem_table() -> str:
    rows = "".join(
        f'<tr><td><a href="/problems/{kind}"><code>/problems/{kind}</code></a></td><td>{one.status}</td>'
        f"<td>{escape(one.title)}</td><td>{escape(one.advice)}</td></tr>"
        for kind, one in CATALOGUE.items()
    )
    return f"<table><tr><th>Type</th><th>Status</th><th>Title</th><th>What to do</th></tr>{rows}</table>"


def problem_page(kind: str) -> str:
    """One problem type."""
    one = CATALOGUE[kind]
    return page(one.title, f"<h1>{escape(one.title)}</h1><p>HTTP status {one.status}.</p><p>{escape(one.advice)}</p>")
