"""Client of a Slackwater service: declare a run, post snapshots, read the verdict.

Needs numpy and httpx only, so that it fits into the environment of a solver.
"""

from slackwater_client.answers import (
    Advice,
    ConvergenceReport,
    GroupReport,
    ModeReport,
    Reason,
    Receipt,
    SnapshotsToGo,
    State,
    Verdict,
)
from slackwater_client.client import Client
from slackwater_client.errors import (
    AccessError,
    BusyError,
    ConflictError,
    InvalidError,
    NotFoundError,
    RefusedError,
    SlackwaterError,
    UnreachableError,
    UnsentError,
    UnsentWarning,
)
from slackwater_client.hook import Hook
from slackwater_client.part import RunPart
from slackwater_client.run import Run

__all__ = [
    "AccessError",
    "Advice",
    "BusyError",
    "Client",
    "ConflictError",
    "ConvergenceReport",
    "GroupReport",
    "Hook",
    "InvalidError",
    "ModeReport",
    "NotFoundError",
    "Reason",
    "Receipt",
    "RefusedError",
    "Run",
    "RunPart",
    "SlackwaterError",
    "SnapshotsToGo",
    "State",
    "UnreachableError",
    "UnsentError",
    "UnsentWarning",
    "Verdict",
]

__version__ = "0.1.0"
