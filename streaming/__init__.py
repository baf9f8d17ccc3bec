"""Streaming POD of unsteady flows: an evolving basis, and a verdict on whether its leading modes have settled."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from streaming.declaration import Criterion, RunDeclaration
from streaming.errors import (
    CheckpointError,
    ClosedError,
    DeclarationError,
    NotReadyError,
    SnapshotError,
    StreamError,
)
from streaming.report import Convergence, State

if TYPE_CHECKING:
    from streaming.stream import SnapshotStream

__all__ = [
    "CheckpointError",
    "ClosedError",
    "Convergence",
    "Criterion",
    "DeclarationError",
    "NotReadyError",
    "RunDeclaration",
    "SnapshotError",
    "SnapshotStream",
    "State",
    "StreamError",
]


def __getattr__(name: str) -> Any:
    """Import the engine when it is first asked for: commands that only declare or wait start without it."""
    if name == "SnapshotStream":
        from streaming.stream import SnapshotStream

        return SnapshotStream
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
