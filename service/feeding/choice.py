"""What the user says of the files: which variables are the fields, and where time runs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from service.feeding.variables import FeedError

TIME_NAMES = ("time", "t", "times")


@dataclass(frozen=True)
class Choice:
    """Selection of what to read from each file.

    Attributes
    ----------
    fields : pairs (field or None, variable); None takes the fields in order, or all of them from one variable
    time : variable of the times; None looks for one called time, t or times
    time_axis : number or dimension name of the axis along which snapshots follow each other; None: that of the time
        variable's dimension, else the first
    without_times : leave times in the files aside
    one_each : every file is one snapshot, without an axis of time
    """

    fields: tuple[tuple[str | None, str], ...] = ()
    time: str | None = None
    time_axis: int | str | None = None
    without_times: bool = False
    one_each: bool = False


def parse_fields(texts: Sequence[str]) -> tuple[tuple[str | None, str], ...]:
    """Pairs from ``FIELD=VARIABLE`` or ``VARIABLE``; all of one kind. Raises FeedError."""
    pairs: list[tuple[str | None, str]] = []
    for text in texts:
        field, equals, variable = text.partition("=")
        if not field or (equals and not variable):
            raise FeedError(f"--variable {text!r}: write VARIABLE or FIELD=VARIABLE")
        pairs.append((field, variable) if equals else (None, field))
    if len({field is None for field, _ in pairs}) > 1:
        raise FeedError(f"--variable {', '.join(texts)}: give all as FIELD=VARIABLE, or none")
    return tuple(pairs)


def parse_axis(text: str | None) -> int | str | None:
    """An axis as a number where it is one, else a name."""
    if text is None:
        return None
    return int(text) if text.lstrip("-").isdecimal() else text
