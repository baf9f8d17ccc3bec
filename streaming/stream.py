"""The engine: snapshots in, evolving basis and verdict out, in one process and without a server."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from pydantic import ValidationError

from streaming.assessment import Assessment, Context, assess, report
from streaming.checkpoint import read_state, save_checkpoint
from streaming.declaration import RunDeclaration
from streaming.errors import ClosedError, DeclarationError, NotReadyError
from streaming.grid import point_positions
from streaming.intake import count_repeats, parse_positions, parse_snapshots, parse_times, parse_weights
from streaming.ledger import Ledger, first_span
from streaming.looks import LookPlan
from streaming.moments import Moments
from streaming.motion import MAX_SNAPSHOTS, Motion, find_motion
from streaming.probes import N_PROBES
from streaming.record import CoefficientRecord
from streaming.report import Convergence, State
from streaming.tall import TallRows, one_blas_thread
from streaming.update import GRAM_CONDITION, Update, update_from_factor, update_from_gram

Float = npt.NDArray[np.floating]
Array = npt.NDArray[np.float64]

_COUNTERS = (
    "n_applied",
    "n_waiting",
    "repeated_snapshots",
    "discarded_energy",
    "bend",
    "total_energy",
    "first_time",
    "applied_time",
    "last_time",
    "closed",
)

# Between looks at its orthonormality the basis may be off by this many eps of its dtype, see `Update.bend`.
STRAIGHT_BEND = 1e3
STRAIGHT_BLOCKS = 16  # at the least, its own products are computed once in so many blocks


class SnapshotStream:
    """Evolving POD basis of a run, with the verdict on its leading modes.

    Parameters
    ----------
    declaration : RunDeclaration or mapping of the same members
    weights : (n_points,) or (n_fields, n_points), optional
        Quadrature weight of each point: cell volume, area, tributary area. All ones when not given.
    positions : (n_points, 1 to 3), optional
        Where scattered points are.
    record_path : path, optional
        File that keeps the temporal coefficients; a temporary file when not given.

    Notes
    -----
    Snapshots are applied in blocks of exactly ``declaration.length_of_block``, whatever the batch sizes were, so
    that the result does not depend on how the stream was cut. Until a block is full its snapshots wait;
    `close` applies what waits. An instance must be used by one thread at a time.

    Raises
    ------
    DeclarationError
        if the declaration, the weights or the positions do not fit together
    """

    def __init__(
        self,
        declaration: RunDeclaration | Mapping[str, Any],
        weights: npt.ArrayLike | None = None,
        positions: npt.ArrayLike | None = None,
        record_path: Path | None = None,
    ) -> None:
        self.declaration = _parse_declaration(declaration)
        self.positions = parse_positions(self.declaration, positions)
        d = self.declaration
        self._tall = TallRows(d.n_rows, d.rank, d.length_of_block, d.real_dtype, parse_weights(d, weights))
        self._ledger = Ledger(d.rank, N_PROBES, first_span(d.length_of_block))
        self._record = CoefficientRecord(d.rank, d.length_of_block, record_path)
        self._values: Array = np.zeros(0)
        self._probes_basis: Array = np.zeros((N_PROBES, 0))
        self._times: list[Array] = []
        self._previous: Float | None = None
        self._plan = LookPlan()
        self._current: tuple[int, Assessment] | None = None
        self._motion = Motion()
        self.n_applied = self.n_waiting = self.repeated_snapshots = 0
        self.discarded_energy = self.bend = 0.0
        self.total_energy = 0.0
        self.first_time: float | None = None
        self.applied_time: float | None = None
        self.last_time: float | None = None
        self.closed = False

    # -- in -----------------------------------------------------------------------------------------------

    @property
    def n_snapshots(self) -> int:
        """Snapshots absorbed: applied to the basis, and waiting for their block."""
        return self.n_applied + self.n_waiting

    @property
    def room(self) -> int:
        """Snapshots until the open block is full."""
        return self.declaration.length_of_block - self.n_waiting

    def absorb(self, snapshots: npt.ArrayLike, times: npt.ArrayLike | None = None) -> int:
        """Take a batch; return how many blocks were applied.

        Parameters
        ----------
        snapshots : (n, n_rows), (n, n_fields, n_points) or, on a grid, (n, n_fields, *shape)
        times : (n,), optional
            Increasing, in the unit of the run; by default the declared step (or 1) times the snapshot number.

        Raises
        ------
        SnapshotError
            if the batch is not as declared; then nothing was absorbed
        ClosedError
            after `close`
        """
        if self.closed:
            raise ClosedError(f"run {self.declaration.name!r} is closed; declare a new run for more snapshots")
        rows = parse_snapshots(self.declaration, snapshots)
        moments = parse_times(self.declaration, times, self.n_snapshots, self.last_time, len(rows))
        blocks = start = 0
        while start < len(rows):
            stop = min(len(rows), start + self.room)
            self._wait(rows[start:stop], moments[start:stop])
            start = stop
            if self.room == 0:
                self._apply_block()
                blocks += 1
        return blocks

    def close(self) -> None:
        """Apply the snapshots that wait for a full block, and take no more.

        A last look is taken unless the modes had settled: that verdict stands until the next look would be due.
        """
        if self.n_waiting:
            self._apply_block()
        last = self._plan.looks[-1] if self._plan.looks else None
        if self.n_applied and (last is None or (last.n_snapshots < self.n_applied and last.state != State.SETTLED)):
            self._look()
        self.closed = True

    def _wait(self, rows: Float, times: Array) -> None:
        self.repeated_snapshots += count_repeats(self._previous, rows)
        self._previous = rows[-1].copy()
        self._tall.put(self.n_waiting, rows)
        self._times.append(times)
        self.n_waiting += len(rows)
        self.first_time = float(times[0]) if self.first_time is None else self.first_time
        self.last_time = float(times[-1])

    def _apply_block(self) -> None:
        """Update basis, ledger and record with the open block."""
        n, times = self.n_waiting, np.concatenate(self._times)
        with one_blas_thread():
            if self.n_applied == 0:
                by_field = len(self.declaration.fields) if self.declaration.scaling == "unit-variance" else None
                self._tall.set_datum(n, by_field)
            rank = self._tall.rank
            straight = (
                self.bend < STRAIGHT_BEND
                and (self.n_applied // self.declaration.length_of_block) % STRAIGHT_BLOCKS != 0
            )
            gram, probed = self._tall.project(n, straight)
            step = self._update(gram, n)
            self._ledger.carry(step.carried)
            energies = np.diag(gram)[rank:]
            self._ledger.add(step.coordinates, probed, energies, times)
        self._record.append(times, step.coordinates, step.carried)
        self._probes_basis = np.concatenate([self._probes_basis, probed.T], axis=1) @ step.transform.T
        self._values, self.bend = step.singular_values, step.bend
        self.total_energy += float(energies.sum())
        self.discarded_energy += step.discarded_energy
        self.n_applied, self.n_waiting, self._times = self.n_applied + n, 0, []
        self.applied_time = float(times[-1])
        if self._plan.due(self.n_applied):
            self._look()

    def _update(self, gram: Array, n: int) -> Update:
        """Decide the update from the cheap Gram matrix, or from a second look at the rows, and turn the basis."""
        rank, dtype = self.declaration.rank, self.declaration.dtype
        step = update_from_gram(self._values, gram, rank, dtype, GRAM_CONDITION[dtype])
        if step is not None:
            self._tall.rotate(step.transform)
            return step
        if dtype == "float32":
            step = update_from_gram(self._values, self._tall.gram_in_double(n), rank, dtype, math.inf)
        step = step or update_from_factor(self._values, self._tall.factor(n), rank, dtype)
        self._tall.rotate(step.transform)
        self._tall.orthonormalise()
        return step

    # -- the verdict ----------------------------------------------------------------------------------------

    def _look(self) -> None:
        """Evaluate the criterion; only here the verdict may change."""
        assessment = self._assess(at_look=True)
        self._motion = self._find_motion(assessment)
        self._plan.take(self.n_applied, assessment.look, report(assessment, self._context(at_look=True)))

    def _find_motion(self, assessment: Assessment) -> Motion:
        """Peak frequencies and travelling pairs of the wanted modes, from the newest coefficients that count."""
        groups = assessment.evidence.groups
        n_last = min(self.n_applied - assessment.startup_snapshots, MAX_SNAPSHOTS)
        times, coordinates = self._record.read(n_last)
        turn = assessment.mode_rotation[:, : max((stop for _, stop in groups), default=0)]
        series = (coordinates[-n_last:, : len(turn)] - assessment.coordinate_mean) @ turn
        positions = point_positions(self.declaration, self.positions)
        return find_motion(times[-n_last:], series, positions, lambda part: self._fields(turn[:, part].T))

    def _assess(self, at_look: bool = False) -> Assessment:
        if self._current is None or self._current[0] != self.n_applied:
            with one_blas_thread():
                found = assess(self.moments(), self.declaration.criterion, self._context(at_look))
            self._current = (self.n_applied, found)
        return self._current[1]

    def _context(self, at_look: bool) -> Context:
        span = 0.0 if self.first_time is None or self.applied_time is None else self.applied_time - self.first_time
        return Context(
            n_snapshots=self.n_applied,
            block_length=self.declaration.length_of_block,
            waiting_snapshots=self.n_waiting,
            n_rows=self.declaration.n_rows,
            time_step=span / (self.n_applied - 1) if self.n_applied > 1 else None,
            time_span=span,
            repeated_snapshots=self.repeated_snapshots,
            previous=self._plan.looks,
            at_look=at_look,
            reference=self.declaration.reference,
            motion=self._motion,
        )

    def moments(self) -> Moments:
        """Return the block moments that all statistics are computed from, in the current basis."""
        if self.n_applied == 0:
            raise NotReadyError(f"no block applied yet: {self.n_waiting} of {self.declaration.length_of_block} are in")
        return self._ledger.moments(self._probes_basis, self._tall.mean_energy(self.n_applied))

    def convergence(self) -> Convergence:
        """Return the numbers and the verdict at this moment."""
        return report(self._assess(), self._context(at_look=False))

    @property
    def history(self) -> tuple[Convergence, ...]:
        """The evaluations at the looks so far, oldest first."""
        return self._plan.history

    # -- results ----------------------------------------------------------------------------------------

    def modes(self, n: int | None = None) -> Float:
        """Return the leading n modes, (n, n_fields, n_points), orthonormal in the weighted inner product.

        W^(-1/2) u in field units; the sign of a mode, and any rotation within a group, are arbitrary.
        """
        turn = self._assess().mode_rotation
        return self._fields(turn[:, : len(turn) if n is None else n].T)

    def _fields(self, coefficients: Array) -> Float:
        """W^(-1/2) (coefficients U) as (n, n_fields, n_points)."""
        with one_blas_thread():
            rows = self._tall.combine_basis(coefficients)
        return rows.reshape(len(rows), len(self.declaration.fields), self.declaration.n_points)

    def mean(self) -> Array:
        """Return the mean of all applied snapshots, (n_fields, n_points), exact whatever was truncated."""
        self.moments()
        rows = self._tall.mean(self.n_applied)
        return rows.reshape(len(self.declaration.fields), self.declaration.n_points)

    def singular_values(self) -> Array:
        """Return the singular values (q,) of the weighted fluctuations in the retained record, descending."""
        assessment = self._assess()
        values: Array = np.sqrt(np.maximum(assessment.eigenvalues, 0.0) * assessment.n_retained)
        return values

    def coefficients(self, n: int | None = None) -> tuple[Array, Array]:
        """Return the times (N,) and the coefficients (N, n) of the leading modes, for the whole record.

        Fluctuations about the mean of the retained record. What a snapshot held outside the basis of its time is
        not in them.
        """
        assessment = self._assess()
        times, coordinates = self._record.read()
        turn = assessment.mode_rotation[:, : len(assessment.mode_rotation) if n is None else n]
        return times, (coordinates[:, : len(turn)] - assessment.coordinate_mean) @ turn

    # -- state ------------------------------------------------------------------------------------------

    def save(self, path: str | Path) -> None:
        """Write a checkpoint, a new zarr directory, whole or not at all.

        Raises
        ------
        CheckpointError
            if ``path`` exists
        """
        save_checkpoint(self, Path(path))

    @classmethod
    def load(cls, path: str | Path, record_path: Path | None = None) -> SnapshotStream:
        """Return the stream that a checkpoint holds; going on gives the same bits as never having stopped.

        The coefficients taken before are kept in the basis of the checkpoint, equal up to round-off.

        Raises
        ------
        CheckpointError
            if the checkpoint is damaged, naming the file
        """
        attributes, arrays = read_state(Path(path))
        declaration = RunDeclaration.model_validate_json(attributes["declaration"])
        stream = cls(declaration, None, arrays.get("positions"), record_path)
        stream._restore(attributes, arrays)
        return stream

    def export(self) -> tuple[dict[str, Any], dict[str, npt.NDArray[Any]]]:
        """Return the whole state: JSON-able attributes and arrays."""
        times, coordinates = self._record.read()
        arrays: dict[str, npt.NDArray[Any]] = {
            **self._tall.export(self.n_waiting),
            **{f"ledger_{name}": values for name, values in self._ledger.export().items()},
            "singular_values": self._values,
            "probes_basis": self._probes_basis,
            "waiting_times": np.concatenate([np.zeros(0), *self._times]),
            "record_times": times,
            "record": coordinates,
        }
        if self.positions is not None:
            arrays["positions"] = self.positions
        if self._previous is not None:
            arrays["previous"] = self._previous
        attributes = {name: getattr(self, name) for name in _COUNTERS}
        return {**attributes, "looks": self._plan.export()}, arrays

    def _restore(self, attributes: dict[str, Any], arrays: dict[str, npt.NDArray[Any]]) -> None:
        for name in _COUNTERS:
            setattr(self, name, attributes[name])
        self._tall.restore(arrays, has_datum=self.n_applied > 0)
        self._ledger.restore({k.removeprefix("ledger_"): v for k, v in arrays.items() if k.startswith("ledger_")})
        self._values, self._probes_basis = arrays["singular_values"], arrays["probes_basis"]
        self._times = [arrays["waiting_times"]]
        self._previous = arrays.get("previous")
        self._record.fill(arrays["record_times"], arrays["record"])
        self._plan.restore(attributes["looks"])
        self._motion = Motion.of_report(self.history[-1]) if self.history else Motion()


def _parse_declaration(declaration: RunDeclaration | Mapping[str, Any]) -> RunDeclaration:
    if isinstance(declaration, RunDeclaration):
        return declaration
    try:
        return RunDeclaration.model_validate(dict(declaration))
    except ValidationError as error:
        raise DeclarationError(str(error)) from error
