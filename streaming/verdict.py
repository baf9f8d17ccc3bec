"""The verdict: a state, and every reason that stands behind it, decided from the numbers alone."""

from __future__ import annotations

from dataclasses import dataclass

from streaming.declaration import Model
from streaming.report import Reason, State


class Look(Model):
    """What one look leaves for the next ones: the record length, the wanted groups, and what it decided.

    ``groups`` are index ranges [start, stop), counted from 0; ``fulfilled`` says that no clause failed.
    """

    n_snapshots: int
    groups: tuple[tuple[int, int], ...]
    fulfilled: bool
    state: State
    reasons: tuple[Reason, ...]
    settled_since: int | None


@dataclass(frozen=True)
class Finding:
    """One clause of the criterion that fails, and the state that it leads to."""

    state: State
    code: str
    text: str


# When several clauses fail, the first of these states is the answer; the reasons name them all.
_PRECEDENCE = (State.GATHERING, State.DRIFTING, State.INSEPARABLE, State.UNSETTLED)


def decide(
    findings: list[Finding],
    n_snapshots: int,
    groups: tuple[tuple[int, int], ...],
    previous: tuple[Look, ...],
    hold: int,
    summary: str,
) -> Look:
    """Decide at a look: settled when no clause fails now and in the ``hold - 1`` looks before, groups unchanged."""
    fulfilled = not findings
    if not fulfilled:
        state = next(s for s in _PRECEDENCE if any(f.state == s for f in findings))
        reasons = tuple(Reason(code=f.code, text=f.text) for f in findings)
        return Look(
            n_snapshots=n_snapshots,
            groups=groups,
            fulfilled=False,
            state=state,
            reasons=reasons,
            settled_since=None,
        )
    agreeing = 1 + _streak(groups, previous)
    if agreeing < hold:
        text = (
            f"All bounds are within tolerance at {agreeing} of {hold} looks in a row with the same groups; "
            "go on until the next look."
        )
        return Look(
            n_snapshots=n_snapshots,
            groups=groups,
            fulfilled=True,
            state=State.UNSETTLED,
            reasons=(Reason(code="holding", text=text),),
            settled_since=None,
        )
    since = previous[-1].settled_since if previous and previous[-1].state == State.SETTLED else None
    return Look(
        n_snapshots=n_snapshots,
        groups=groups,
        fulfilled=True,
        state=State.SETTLED,
        reasons=(Reason(code="settled", text=summary),),
        settled_since=since or n_snapshots,
    )


def _streak(groups: tuple[tuple[int, int], ...], previous: tuple[Look, ...]) -> int:
    count = 0
    for look in reversed(previous):
        if not look.fulfilled or look.groups != groups:
            break
        count += 1
    return count
