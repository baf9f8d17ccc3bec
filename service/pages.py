"""Plain pages for people, made here and complete in themselves: the operations and the problem types."""

from __future__ import annotations

from html import escape
from typing import Any

from service.problems import CATALOGUE


def page(title: str, body: str) -> str:
    """A whole document; its style is a file of its own, since the pages allow none inside."""
    return (
        '<!doctype html><html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        '<link rel="icon" href="/page/icon.svg" type="image/svg+xml"><link rel="stylesheet" href="/page/plain.css">'
        f"<title>{escape(title)}</title></head><body><main>{body}</main></body></html>"
    )


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
