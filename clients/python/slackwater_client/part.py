"""One part of a run: the rows of a snapshot that one rank or device posts."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy.typing as npt

from slackwater_client.answers import Receipt

if TYPE_CHECKING:
    from slackwater_client.hook import Hook
    from slackwater_client.run import Run


class RunPart:
    """Part ``number`` of a run that was declared with parts, counted from 0. Made by `Run.part`.

    Every method may raise what those of `Run` raise.
    """

    # A batch that is left out would put all later rows of this part beside other times than those of the other parts.
    stops_at_loss = True

    def __init__(self, run: Run, number: int) -> None:
        parts = run.declaration.get("parts")
        if not parts:
            raise ValueError(f"run {run.id} was declared without parts; post whole snapshots")
        if not 0 <= number < len(parts):
            raise ValueError(f"run {run.id} has parts 0 to {len(parts) - 1}, there is no part {number}")
        self._run, self.number = run, number
        self.start, self.stop = int(parts[number]["start"]), int(parts[number]["stop"])

    def __repr__(self) -> str:
        return f"<part {self.number} of {self._run!r}: points {self.start} to {self.stop}>"

    @property
    def declaration(self) -> dict[str, Any]:
        """The declaration of the run, with the points of this part alone."""
        return {**self._run.declaration, "n_points": self.stop - self.start, "grid": {"kind": "none"}, "parts": None}

    @property
    def next_sequence(self) -> int:
        """Number for the next batch of this part, read from the service now: where a restarted rank goes on."""
        return int(self.refresh()["next_sequence"])

    def refresh(self) -> dict[str, Any]:
        """How far this part has come, read from the service."""
        return self._run.read_part(self.number)

    def post(
        self,
        snapshots: npt.ArrayLike,
        sequence: int | None = None,
        times: npt.ArrayLike | None = None,
        *,
        patience_seconds: float = 0.0,
    ) -> Receipt:
        """Post the points of this part for one batch, by default the next; see `Run.post_part`."""
        number = self.next_sequence if sequence is None else sequence
        return self._run.post_part(self.number, snapshots, number, times, patience_seconds=patience_seconds)

    def hook(self, every: int = 1, batch: int = 8, **settings: Any) -> Hook:
        """What a rank calls at each step with the fields of its own points; `slackwater_client.hook.Hook`.

        All ranks use the same ``every`` and ``batch``. A rank that starts again gives times with its steps, and goes on
        after what the run holds of its part.
        """
        from slackwater_client.hook import Hook

        return Hook(self, every=every, batch=batch, **settings)
