"""The verdict: a state, and every reason that stands behind it, decided from the numbers alone."""

from __future__ import annotations

import math
from dataclasses import dataclass

from streaming.declaration import Criterion, Model
from streaming.report import Reason, State

ANGLE = "angle"  # code of the clause that a longer record alone cures


@dataclass(frozen=True)
class Finding:
    """One clause of the criterion that fails, and the state that it leads to."""

    state: State
    code: str
    text: str


class Look(Model):
    """What one look leaves for the next ones, and what it decided.

    Attributes
    ----------
    n_snapshots : length of the record
    groups : wanted groups, index ranges [start, stop) counted from 0
    bound_sine : largest misalignment bound of these groups, as a sine
    sound : no clause failed but that of the angle
    """

    n_snapshots: int
    groups: tuple[tuple[int, int], ...]
    bound_sine: float
    sound: bool
    state: State
    reasons: tuple[Reason, ...]
    settled_since: int | None = None


# When several clauses fail, the first of these states is the answer; the reasons name them all.
_PRECEDENCE = (State.GATHERING, State.DRIFTING, State.INSEPARABLE, State.UNSETTLED)


def decide(
    findings: tuple[Finding, ...],
    n_snapshots: int,
    groups: tuple[tuple[int, int], ...],
    bound_sine: float,
    previous: tuple[Look, ...],
    criterion: Criterion,
) -> Look:
    """Decide at a look: settled when no clause fails and the looks before agree, see `agreeing_looks`."""
    sound = all(finding.code == ANGLE for finding in findings)
    look = Look(
        n_snapshots=n_snapshots,
        groups=groups,
        bound_sine=min(bound_sine, 1.0),
        sound=sound,
        state=State.UNSETTLED,
        reasons=(),
    )
    if findings:
        state = next(s for s in _PRECEDENCE if any(f.state == s for f in findings))
        reasons = tuple(Reason(code=f.code, text=f.text) for f in findings)
        return look.model_copy(update={"state": state, "reasons": reasons})
    agreeing = agreeing_looks(look, previous, criterion.max_angle_deg)
    if agreeing < criterion.hold:
        return look.model_copy(update={"reasons": (_holding(agreeing, criterion.hold),)})
    since = previous[-1].settled_since if previous and previous[-1].state == State.SETTLED else None
    return look.model_copy(
        update={
            "state": State.SETTLED,
            "reasons": (_settled(look, criterion),),
            "settled_since": since or n_snapshots,
        }
    )


def agreeing_looks(look: Look, previous: tuple[Look, ...], max_angle_deg: float) -> int:
    """Number of looks in a row, this one included, that say that a record as long as now suffices.

    An earlier look agrees when it found the same groups, failed in no clause but the angle, and its bound,
    brought from its own record length to the present one by N^(-1/2), is within tolerance.
    """
    tolerance = math.sin(math.radians(max_angle_deg))
    count = 1
    for earlier in reversed(previous):
        brought = earlier.bound_sine * math.sqrt(earlier.n_snapshots / look.n_snapshots)
        if not earlier.sound or earlier.groups != look.groups or brought > tolerance:
            break
        count += 1
    return count


def _holding(agreeing: int, hold: int) -> Reason:
    text = (
        f"Every bound is within tolerance, but {hold} looks in a row must agree on groups and bounds and "
        f"{agreeing} does so far; go on until the next look."
    )
    return Reason(code="holding", text=text)


def _settled(look: Look, criterion: Criterion) -> Reason:
    bound = math.degrees(math.asin(look.bound_sine))
    within = "within" if bound <= criterion.max_angle_deg else "since they settled wavering about"
    text = (
        f"The largest misalignment bound of the wanted modes is {bound:.1f} deg at "
        f"{100 * criterion.confidence:g} % confidence, {within} the tolerated {criterion.max_angle_deg:g} deg. "
        "The sampling of what was recorded suffices; states that the flow has not visited are not in it."
    )
    return Reason(code="settled", text=text)
