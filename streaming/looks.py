"""When the verdict is looked at again: at geometrically spaced times, so that looking costs little confidence."""

from __future__ import annotations

from typing import Any

from streaming.report import Convergence
from streaming.verdict import Look

GROWTH = 1.1  # looks at n, 1.1 n, ...: 147 of them from 80 to 10^8 snapshots, so the history is bounded


class LookPlan:
    """Looks taken so far, their reports, and the number of snapshots at which the next one is due."""

    def __init__(self) -> None:
        self.next = 1
        self.looks: tuple[Look, ...] = ()
        self.history: tuple[Convergence, ...] = ()

    def due(self, n_applied: int) -> bool:
        """Whether a look is due with so many snapshots in the basis."""
        return n_applied >= self.next

    def take(self, n_applied: int, look: Look, report: Convergence) -> None:
        """Add a look and set the time of the next one."""
        self.looks = (*self.looks, look)
        self.history = (*self.history, report)
        self.next = int(n_applied * GROWTH) + 1

    def export(self) -> dict[str, Any]:
        """Return the plan as JSON-able members."""
        return {
            "next": self.next,
            "looks": [look.model_dump(mode="json") for look in self.looks],
            "history": [report.model_dump(mode="json") for report in self.history],
        }

    def restore(self, state: dict[str, Any]) -> None:
        """Take back what `export` gave."""
        self.next = state["next"]
        self.looks = tuple(Look.model_validate(look) for look in state["looks"])
        self.history = tuple(Convergence.model_validate(report) for report in state["history"])
