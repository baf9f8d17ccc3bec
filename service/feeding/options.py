"""Options of the commands that read files: what they are called, and what they become."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated, Any

import numpy as np
import typer

from service.feeding.variables import FeedError, Values

MAX_DECLARATION_BYTES = 64 * 2**20  # as much as the service takes

DeclarationFile = Annotated[
    Path | None,
    typer.Option(
        "--declaration",
        metavar="FILE",
        help="JSON of the run; members that are left out are taken from the data.",
    ),
]
RunOption = Annotated[str | None, typer.Option("--run", metavar="RUN", help="Id of a run that is declared already.")]
Variables = Annotated[
    list[str] | None,
    typer.Option(
        "--variable",
        metavar="[FIELD=]VARIABLE",
        help="Variable of a field, once for each field; or one that holds all fields.",
    ),
]
TimeVariable = Annotated[
    str | None, typer.Option("--time", help="Variable of the times (else one called time, t or times).")
]
TimeAxis = Annotated[
    str | None,
    typer.Option(help="Axis along which snapshots follow: its number or name (else that of the times, or the first)."),
]
WithoutTimes = Annotated[bool, typer.Option("--without-times", help="Leave times in the files aside.")]
OneEach = Annotated[bool, typer.Option("--one-each", help="Each file is one snapshot, with no axis of time.")]
Name = Annotated[str | None, typer.Option(help="Name of the run.")]
Campaign = Annotated[str | None, typer.Option(help="Campaign that the run belongs to.")]
Modes = Annotated[int | None, typer.Option(min=1, help="Number of modes that must settle [6].")]
MaxAngle = Annotated[float | None, typer.Option(help="Tolerated misalignment of each mode group, degrees [10].")]
Weights = Annotated[Path | None, typer.Option(metavar="NPY", help="Weight of each point: volume or area.")]
Positions = Annotated[Path | None, typer.Option(metavar="NPY", help="Positions of scattered points.")]
BatchBytes = Annotated[int, typer.Option("--max-batch-bytes", min=1024, help="Most that is read, and posted, at once.")]
Patience = Annotated[
    float, typer.Option(min=0.0, help="Seconds to go on trying while the service is away, busy or full.")
]


def declared_members(
    file: Path | None, name: str | None, campaign: str | None, modes: int | None, max_angle_deg: float | None
) -> dict[str, Any]:
    """Members of a declaration from its file, options on top. Raises FeedError."""
    members = {} if file is None else _read_json(file)
    criterion = dict(members.get("criterion", {}))
    given = {"n_modes": modes, "max_angle_deg": max_angle_deg}
    criterion |= {key: value for key, value in given.items() if value is not None}
    if criterion:
        members["criterion"] = criterion
    return members | {key: value for key, value in (("name", name), ("campaign", campaign)) if value is not None}


def _read_json(file: Path) -> dict[str, Any]:
    try:
        if file.stat().st_size > MAX_DECLARATION_BYTES:
            raise FeedError(f"{file} has more than {MAX_DECLARATION_BYTES} bytes; it is no declaration")
        members = json.loads(file.read_text())
    except (OSError, ValueError) as error:
        raise FeedError(f"{file} cannot be read as JSON: {error}") from error
    if not isinstance(members, dict):
        raise FeedError(f"{file} holds no JSON object; a declaration looks like the one in clients/README.md")
    return members


def load_npy(path: Path | None) -> Values | None:
    """A small array beside the data. Raises FeedError."""
    if path is None:
        return None
    try:
        values: Values = np.load(path, allow_pickle=False)
    except (OSError, ValueError) as error:
        raise FeedError(f"{path} cannot be read as NPY: {error}") from error
    return values
