"""How raw bodies and array answers are described in OpenAPI, which cannot see them in the code."""

from __future__ import annotations

from typing import Any

NPY = "application/x-npy"
_BINARY = {"schema": {"type": "string", "format": "binary"}}


def npy_body(description: str) -> dict[str, Any]:
    """``openapi_extra`` of an operation that takes an NPY file."""
    return {
        "requestBody": {
            "required": True,
            "description": description,
            "content": {NPY: _BINARY, "application/octet-stream": _BINARY},
        }
    }


def array_answer(description: str, *, picture: bool = False) -> dict[int | str, dict[str, Any]]:
    """``responses`` of an operation that gives an array."""
    content: dict[str, Any] = {NPY: _BINARY, "application/json": {"schema": {"type": "object"}}}
    if picture:
        content["image/png"] = _BINARY
    header = {
        "Slackwater-Snapshots": {
            "description": "snapshots that the answer covers",
            "schema": {"type": "integer"},
        }
    }
    return {200: {"description": description, "content": content, "headers": header}}


def refusals(*statuses: int) -> dict[int | str, dict[str, Any]]:
    """``responses`` of the refusals that an operation is known to give."""
    schema = {"$ref": "#/components/schemas/ProblemDocument"}
    return {
        status: {"description": "refused", "content": {"application/problem+json": {"schema": schema}}}
        for status in statuses
    }
