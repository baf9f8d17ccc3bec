"""Streaming POD of unsteady flows: an evolving basis, and a verdict on whether its leading modes have settled."""

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
