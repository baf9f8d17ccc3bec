"""The engine: snapshots in, evolving basis and verdict out, in one process and without a server."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from pydantic import ValidationError

from streaming.assessment import Assessment, Context, assess, report
from streaming.basis import EvolvingBasis
from streaming.checkpoint import read_state, save_checkpoint
from streaming.declaration import RunDeclaration
from streaming.errors import CheckpointError, ClosedError, DeclarationError, NotReadyError
from streaming.grid import point_positions
from streaming.intake import count_repeats, parse_positions, parse_snapshots, parse_times, parse_weights
from streaming.ledger import Ledger, first_span
from streaming.looks import LookPlan
from streaming.moments import Moments
from streaming.motion import MAX_SNAPSHOTS, Motion, find_motion
from streaming.novelty import Watch
from streaming.probes import N_PROBES
from streaming.record import CoefficientRecord
from streaming.report import Convergence, State
from streaming.tall import one_blas_thread

Float = npt.NDArray[np.floating]
Array = npt.NDArray[np.float64]

_COUNTERS = ("n_waiting", "repeated_snapshots", "first_time", "applied_time", "last_time", "closed")


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
        self._basis = EvolvingBasis(d, parse_weights(d, weights))
        self._ledger = Ledger(d.rank, N_PROBES, first_span(d.length_of_block))
        self._record = CoefficientRecord(d.rank, d.length_of_block, record_path)
        self._watch = Watch()
        self._times: list[Array] = []
        self._previous: Float | None = None
        self._plan = LookPlan()
        self._current: tuple[int, Assessment] | None = None
        self._motion = Motion()
        self.n_waiting = self.repeated_snapshots = 0
        self.first_time: float | None = None
        self.applied_time: float | None = None
        self.last_time: float | None = None
        self.closed = False

    # -- in -----------------------------------------------------------------------------------------------

    @property
    def n_applied(self) -> int:
        """Snapshots in the basis."""
        return self._basis.n_snapshots

    @property
    def total_energy(self) -> float:
        """Sum of |y|^2 over the snapshots in the basis, about the datum; exact whatever was truncated."""
        return self._basis.total_energy

    @property
    def discarded_energy(self) -> float:
        """Part of the total energy that truncation has dropped."""
        return self._basis.discarded_energy

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
        self._basis.put(self.n_waiting, rows)
        self._times.append(times)
        self.n_waiting += len(rows)
        self.first_time = float(times[0]) if self.first_time is None else self.first_time
        self.last_time = float(times[-1])

    def _apply_block(self) -> None:
        """Update basis, ledger, watch and record with the open block."""
        times = np.concatenate(self._times)
        block = self._basis.apply(self.n_waiting)
        with one_blas_thread():
            self._ledger.carry(block.carried)
            self._ledger.add(block.coordinates, block.probed, block.energies, times)
        novelty = self._watch.judge(block.foreseen, block.energies)
        if block.foreseen.shape[1]:  # before there is a basis, all of a snapshot lies outside it
            self._watch = self._watch.learnt(novelty[:, 0])
        self._watch = self._watch.carried(block.carried)
        self._record.append(times, block.coordinates, block.carried, novelty)
        self.n_waiting, self._times, self.applied_time = 0, [], float(times[-1])
        if self._plan.due(self.n_applied):
            self._look()

    # -- the verdict ----------------------------------------------------------------------------------------

    def _look(self) -> None:
        """Evaluate the criterion; only here the verdict may change."""
        assessment = self._assess(at_look=True)
        self._motion = self._find_motion(assessment)
        n_modes = max((stop for _, stop in assessment.evidence.groups), default=0)
        self._watch = self._watch.set(
            assessment.mode_rotation[:, :n_modes].T,
            assessment.coordinate_mean,
            assessment.eigenvalues[:n_modes],
            assessment.evidence.effective_samples,
        )
        self._plan.take(self.n_applied, assessment.look, report(assessment, self._context(at_look=True)))

    def _find_motion(self, assessment: Assessment) -> Motion:
        """Peak frequencies and travelling pairs of the wanted modes, from the newest coefficients that count."""
        groups = assessment.evidence.groups
        n_last = min(self.n_applied - assessment.startup_snapshots, MAX_SNAPSHOTS)
        times, coordinates = self._record.read(n_last)
        turn = assessment.mode_rotation[:, : max((stop for _, stop in groups), default=0)]
        series = (coordinates[-n_last:, : len(turn)] - assessment.coordinate_mean) @ turn
        positions = point_positions(self.declaration, self.positions)
        return find_motion(times[-n_last:], series, positions, lambda part: self._basis.fields(turn[:, part].T))

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
        self._check_ready()
        moments = self._ledger.moments(self._basis.probes_basis, self._basis.mean_energy())
        exact = self._basis.seen_covariance(moments.mean()[moments.rank :])
        return moments.with_unseen(exact - moments.covariance()[moments.rank :, : moments.rank])

    def _check_ready(self) -> None:
        if self.n_applied == 0:
            raise NotReadyError(f"no block applied yet: {self.n_waiting} of {self.declaration.length_of_block} are in")

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
        return self._basis.fields(turn[:, : len(turn) if n is None else n].T)

    def mean(self) -> Array:
        """Return the mean of all applied snapshots, (n_fields, n_points), exact whatever was truncated."""
        self._check_ready()
        return self._basis.mean()

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

    def novelty(self) -> tuple[Array, Array]:
        """Return the times (N,) and how new each snapshot was when it came, (N, 4), columns `novelty.COLUMNS`.

        Energy outside the basis and its limit, squared Hotelling distance in the wanted modes and its limit; NaN
        where nothing was known yet.
        """
        self._check_ready()
        return self._record.read_novelty()

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
        try:
            stream._restore(attributes, arrays)
        except KeyError as error:
            raise CheckpointError(f"{path} has no {error}: it was written by another version; start over") from error
        return stream

    def export(self) -> tuple[dict[str, Any], dict[str, npt.NDArray[Any]]]:
        """Return the whole state: JSON-able attributes and arrays."""
        attributes, arrays = self._basis.export(self.n_waiting)
        arrays |= {f"ledger_{name}": values for name, values in self._ledger.export().items()}
        arrays |= {f"watch_{name}": values for name, values in self._watch.export().items()}
        arrays["record_times"], arrays["record"] = self._record.read()
        arrays["record_novelty"] = self._record.read_novelty()[1]
        arrays["waiting_times"] = np.concatenate([np.zeros(0), *self._times])
        if self.positions is not None:
            arrays["positions"] = self.positions
        if self._previous is not None:
            arrays["previous"] = self._previous
        attributes |= {name: getattr(self, name) for name in _COUNTERS}
        return {**attributes, "looks": self._plan.export()}, arrays

    def _restore(self, attributes: dict[str, Any], arrays: dict[str, npt.NDArray[Any]]) -> None:
        for name in _COUNTERS:
            setattr(self, name, attributes[name])
        self._basis.restore(attributes, arrays)
        self._ledger.restore(_part(arrays, "ledger_"))
        self._watch = Watch.of(_part(arrays, "watch_"))
        self._times = [arrays["waiting_times"]]
        self._previous = arrays.get("previous")
        self._record.fill(arrays["record_times"], arrays["record"], arrays["record_novelty"])
        self._plan.restore(attributes["looks"])
        self._motion = Motion.of_report(self.history[-1]) if self.history else Motion()


def _part(arrays: dict[str, npt.NDArray[Any]], prefix: str) -> dict[str, npt.NDArray[Any]]:
    return {name.removeprefix(prefix): values for name, values in arrays.items() if name.startswith(prefix)}


def _parse_declaration(declaration: RunDeclaration | Mapping[str, Any]) -> RunDeclaration:
    if isinstance(declaration, RunDeclaration):
        return declaration
    try:
        return RunDeclaration.model_validate(dict(declaration))
    except ValidationError as error:
        raise DeclarationError(str(error)) from error
