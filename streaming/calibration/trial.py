"""One trial: the whole stopping rule on one record of a process whose modes are known."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from streaming.calibration.processes import PROCESSES, Process, Sample
from streaming.declaration import Criterion, FieldSpec, RunDeclaration
from streaming.groups import Group
from streaming.report import Convergence, State
from streaming.stream import SnapshotStream

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Seen:
    """What one look said, and what was true at it. Angles in degrees.

    Attributes
    ----------
    bounds, angles : of the groups that the look named
    true_angle : largest true angle of the process's own groups that hold the wanted modes
    change : largest angle of these groups to the look before; 90 at the first look
    """

    n_snapshots: int
    state: State
    bounds: tuple[float, ...]
    angles: tuple[float, ...]
    true_angle: float
    change: float


@dataclass(frozen=True)
class Trial:
    """Outcome of one trial. Record lengths are None when it did not happen within the bound.

    Attributes
    ----------
    stop : snapshots at the first settled verdict
    false_stop : a group was misaligned by more than the tolerance at the stop
    oracle : snapshots at the first of ``hold`` looks in a row at which the true angle is within tolerance
    lasting : snapshots at the first look from which on the true angle stayed within tolerance to the end of the trial
    naive_stop, naive_false : the same for the rule "change between looks below tolerance, ``hold`` times in a row"
    covered, n_bounds : bounds of looks past gathering that the truth kept, and their number
    """

    stop: int | None
    false_stop: bool
    oracle: int | None
    lasting: int | None
    naive_stop: int | None
    naive_false: bool
    covered: int
    n_bounds: int


def run_trial(process_name: str, seed: int, max_angle_deg: float = 10.0, hold: int = 2) -> Trial:
    """Stream one record until the rule, the oracle and the naive rule have all stopped, or the record ends."""
    process = PROCESSES[process_name]
    criterion = Criterion(n_modes=process.n_modes, max_angle_deg=max_angle_deg, hold=hold)
    sample = process.draw(seed, process.max_snapshots)
    stream = SnapshotStream(_declaration(process, criterion))
    seen: list[Seen] = []
    before: Array | None = None
    length = stream.declaration.length_of_block
    for start in range(0, len(sample.snapshots), length):
        stream.absorb(sample.snapshots[start : start + length])
        if len(stream.history) > len(seen):
            modes = stream.modes()[:, 0].astype(np.float64)
            seen.append(look_at_truth(stream.history[-1], modes, before, sample, process.n_modes))
            before = modes
            if _all_stopped(outcome(seen, criterion)):
                break
    return outcome(seen, criterion)


def _declaration(process: Process, criterion: Criterion) -> RunDeclaration:
    return RunDeclaration(
        name=process.name,
        n_points=process.n_rows,
        fields=[FieldSpec(name="u")],
        dtype="float64",
        retained_rank=process.retained_rank,
        criterion=criterion,
    )


def look_at_truth(said: Convergence, modes: Array, before: Array | None, sample: Sample, n_modes: int) -> Seen:
    """Compare what a look said with the modes of the process."""
    named = [(group.modes[0] - 1, group.modes[-1]) for group in said.groups]
    own = [group for group in sample.groups if group[0] < n_modes]
    return Seen(
        n_snapshots=said.n_snapshots,
        state=said.verdict.state,
        bounds=tuple(group.angle_bound_deg for group in said.groups),
        angles=tuple(angle_deg(modes, sample.modes, group) for group in named),
        true_angle=max(angle_deg(modes, sample.modes, group) for group in own),
        change=90.0 if before is None else max(angle_deg(modes, before, group) for group in own),
    )


def angle_deg(first: Array, second: Array, group: Group) -> float:
    """Largest principal angle between the rows ``group`` of two sets of orthonormal rows, by its sine.

    References
    ----------
    Björck & Golub (1973), Math. Comp. 27, 579-594: the sine is accurate for small angles, the cosine is not.
    """
    a, b = first[group[0] : group[1]], second[group[0] : group[1]]
    if len(a) < group[1] - group[0] or len(b) < group[1] - group[0]:
        return 90.0
    sine = float(np.linalg.norm(a - (a @ b.T) @ b, 2))
    return float(np.degrees(np.arcsin(min(sine, 1.0))))


def outcome(seen: list[Seen], criterion: Criterion) -> Trial:
    """Sum up the looks of a trial."""
    tolerance, hold = criterion.max_angle_deg, criterion.hold
    stop = next((look for look in seen if look.state == State.SETTLED), None)
    oracle = _first_run([look.true_angle <= tolerance for look in seen], hold)
    naive = _first_run([look.change <= tolerance for look in seen], hold)
    naive_look = None if naive is None else seen[naive + hold - 1]
    pairs = [
        (true, bound)
        for look in seen
        if look.state != State.GATHERING
        for true, bound in zip(look.angles, look.bounds, strict=True)
    ]
    return Trial(
        stop=None if stop is None else stop.n_snapshots,
        false_stop=stop is not None and max(stop.angles) > tolerance,
        oracle=None if oracle is None else seen[oracle].n_snapshots,
        lasting=_lasting(seen, tolerance),
        naive_stop=None if naive_look is None else naive_look.n_snapshots,
        naive_false=naive_look is not None and naive_look.true_angle > tolerance,
        covered=sum(true <= bound for true, bound in pairs),
        n_bounds=len(pairs),
    )


def _lasting(seen: list[Seen], tolerance: float) -> int | None:
    """Record length at the first look of the last unbroken run of looks within tolerance."""
    length = None
    for look in reversed(seen):
        if look.true_angle > tolerance:
            break
        length = look.n_snapshots
    return length


def _first_run(flags: list[bool], length: int) -> int | None:
    """Index at which the first run of ``length`` true flags begins."""
    return next((k for k in range(len(flags) - length + 1) if all(flags[k : k + length])), None)


def _all_stopped(trial: Trial) -> bool:
    return None not in (trial.stop, trial.oracle, trial.naive_stop)
