"""What a solver calls at each step: it buffers snapshots and posts them in the background."""

from __future__ import annotations

import warnings
from collections.abc import Mapping, Sequence
from types import TracebackType
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from slackwater_client.answers import Advice, Receipt
from slackwater_client.errors import SlackwaterError, UnsentError, UnsentWarning
from slackwater_client.outbox import Batch, Outbox, log

if TYPE_CHECKING:
    from slackwater_client.part import RunPart
    from slackwater_client.run import Run

Fields = npt.ArrayLike | Sequence[npt.ArrayLike] | Mapping[str, npt.ArrayLike]

# A restart of the service takes seconds, in which a solver makes a few snapshots; this holds 30 snapshots of
# 10^6 points and two float32 fields, and is small beside the solver that makes them.
MAX_WAITING_BYTES = 256 << 20
PATIENCE_SECONDS = 600.0  # longer than a restart or a reboot takes
RESUME_MARGIN_FRACTION = 1e-9  # above float64 rounding of summed steps, far below any step between snapshots
FLUSH_SECONDS = 60.0  # a solver that ends should not keep its nodes for much longer than this


class Hook:
    """Post every ``every``-th step of a solver, ``batch`` snapshots at a time, from a background thread.

        with run.hook(every=20, batch=8) as hook:
            for step in range(n_steps):
                advance()
                if hook(step, time, fields) == "may stop":
                    break

    The solver is held up for one copy of a snapshot. While the service is away, busy or full, batches wait in
    memory and are tried again for as long as the hook lives, each under its number, so that none is lost and
    none counts twice. A dead service raises nothing into the solver: the advice then is "continue", and the
    log (logger ``slackwater_client``) says what is wrong. At the end the hook waits for what is still unsent,
    for at most ``flush_seconds``, and warns (`UnsentWarning`) with the number of snapshots that were lost.

    A solver that starts again finds its run with ``client.run(id)`` and makes a new hook: numbers go on where
    they ended, and steps whose time the run holds already are skipped (``skipped_snapshots``).

    In this version snapshots wait in memory only: when the solver is killed, those not yet sent are lost. A
    spool on disk will close that gap.

    Parameters
    ----------
    every : post the steps that divide by it
    batch : snapshots per post
    hold_seconds : how long a full memory may hold the solver up before a batch is given up; 0, never
    max_waiting_bytes : bound on the snapshots that wait in memory
    patience_seconds : how long the service may be out of reach before `UnsentError` with ``raise_errors``
    flush_seconds : how long the end of the hook may take
    raise_errors : raise `UnsentError` at the next call when patience has ended or snapshots were lost

    Notes
    -----
    With several ranks, call the hook on one rank with the gathered fields; or, in a run declared with parts, one
    hook on each rank with the fields of its own points (``run.part(rank).hook()``, the same ``every`` and ``batch``
    on all). Either way broadcast the advice of one rank, so that all stop at the same step. A part sends nothing more
    after a batch of it was lost, since its later rows would stand beside other times than those of the other parts.

    The advice is for a simulation to end itself by and for people to read: never wire it to an interlock, nor let it
    drive a rig.
    """

    def __init__(
        self,
        run: Run | RunPart,
        *,
        every: int = 1,
        batch: int = 8,
        hold_seconds: float = 0.0,
        max_waiting_bytes: int = MAX_WAITING_BYTES,
        patience_seconds: float = PATIENCE_SECONDS,
        flush_seconds: float = FLUSH_SECONDS,
        raise_errors: bool = False,
    ) -> None:
        if every < 1 or batch < 1:
            raise ValueError(f"every and batch must be at least 1, got {every} and {batch}")
        self._every, self._batch = every, batch
        self._hold_seconds, self._flush_seconds = hold_seconds, flush_seconds
        self._raise_errors = raise_errors
        declaration = run.declaration
        self._names = [str(field["name"]) for field in declaration["fields"]]
        self._n_points = int(declaration["n_points"])
        self._dtype = np.dtype(str(declaration.get("dtype", "float32")))
        stored = _stored(run)
        self._resume_after = _last_time(stored)
        self._buffer = self._new_buffer(_first_length(stored) or batch)
        self._times: list[float] = []
        self._filled = 0
        self._closed = False
        self.skipped_snapshots = 0
        self._outbox = Outbox(
            lambda ready, sequence: run.post(ready.snapshots, sequence, ready.times),
            lambda: run.next_sequence,
            max_waiting_bytes,
            patience_seconds,
            run.stops_at_loss,
        )

    def __call__(self, step: int, time: float | None, fields: Fields) -> Advice:
        """Take the fields of a step if it is one to post, and say whether to go on.

        Parameters
        ----------
        step : number of the step
        time : in the time unit of the run; None at every step when the declared step holds for snapshots
        fields : array (n_fields, n_points) or (n_fields, *grid shape), or one array per field in the declared
            order, or a mapping from field name to array; copied, so the solver may overwrite them

        Raises
        ------
        ValueError : fields of another shape than declared, or times given for some steps only
        UnsentError : only with ``raise_errors``
        """
        if self._closed:
            raise ValueError("the hook was closed; make a new one with run.hook()")
        if step % self._every == 0 and not self._is_known(time):
            self._take(time, fields)
            if self._filled == len(self._buffer):
                self._hand_over()
        if self._raise_errors and (self._outbox.out_of_patience or self._outbox.lost_snapshots):
            raise UnsentError(self._account())
        return self.advice

    @property
    def advice(self) -> Advice:
        """The advice of the last receipt; "continue" before the first one and while out of contact."""
        receipt = self._outbox.receipt
        return receipt.advice if receipt is not None and self._outbox.in_contact else "continue"

    @property
    def receipt(self) -> Receipt | None:
        """The last receipt, or None before the first."""
        return self._outbox.receipt

    @property
    def sent_snapshots(self) -> int:
        """Snapshots that the service has on disk."""
        return self._outbox.sent_snapshots

    @property
    def unsent_snapshots(self) -> int:
        """Snapshots that wait in memory."""
        return self._outbox.unsent_snapshots + self._filled

    @property
    def lost_snapshots(self) -> int:
        """Snapshots given up: refused, or no room in memory."""
        return self._outbox.lost_snapshots

    def close(self) -> None:
        """Send what is left, for at most ``flush_seconds``; warn of the rest, or raise if asked to."""
        if self._finish():
            return
        if self._raise_errors:
            raise UnsentError(self._account())
        warnings.warn(UnsentWarning(self._account()), stacklevel=2)

    def __enter__(self) -> Hook:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if kind is None:
            self.close()
        elif not self._finish():
            log.warning("%s", self._account())  # the error on its way out is the one to see

    def _finish(self) -> bool:
        """Send what is left and end the thread; True when all snapshots arrived, or when it was done before."""
        if self._closed:
            return True
        self._closed = True
        if self._filled:
            self._hand_over()
        self._outbox.finish(self._flush_seconds)
        return not (self.unsent_snapshots or self.lost_snapshots)

    def _is_known(self, time: float | None) -> bool:
        """True for a step that the run holds already, as after a restart from an older solver checkpoint."""
        if time is None or self._resume_after is None or time > self._resume_after:
            return False
        self.skipped_snapshots += 1
        return True

    def _take(self, time: float | None, fields: Fields) -> None:
        """Copy one snapshot into the buffer."""
        if self._filled and (time is None) == bool(self._times):
            raise ValueError("give a time with every step, or None with every step")
        parts = [fields[name] for name in self._names] if isinstance(fields, Mapping) else fields
        slot = self._buffer[self._filled]
        if isinstance(parts, Sequence):
            if len(parts) != len(self._names):
                raise ValueError(f"{len(self._names)} fields are declared ({self._names}), got {len(parts)}")
            for row, part in zip(slot, parts, strict=True):
                _copy(part, row)
        else:
            _copy(parts, slot)
        if time is not None:
            self._times.append(float(time))
        self._filled += 1

    def _hand_over(self) -> None:
        """Give the buffered snapshots to the outbox and start a new buffer."""
        times = tuple(self._times) if self._times else None
        self._outbox.offer(Batch(self._buffer[: self._filled], times), self._hold_seconds)
        self._buffer, self._times, self._filled = self._new_buffer(self._batch), [], 0

    def _new_buffer(self, n_snapshots: int) -> npt.NDArray[Any]:
        return np.empty((n_snapshots, len(self._names), self._n_points), dtype=self._dtype)

    def _account(self) -> str:
        outbox = self._outbox
        return (
            f"{outbox.sent_snapshots} snapshots were sent, {self.unsent_snapshots} could not be sent, "
            f"{outbox.lost_snapshots} were refused or found no room; last error: {outbox.last_error}"
        )


def _stored(run: Run | RunPart) -> Mapping[str, Any]:
    """Where the run, or the part of it, stands; empty when that cannot be known now."""
    try:
        return run.refresh()
    except SlackwaterError as error:
        log.warning("the hook starts without knowing where the run stands: %s", error)
        return {}


def _last_time(stored: Mapping[str, Any]) -> float | None:
    """Time up to which the run holds snapshots, just above the last one; None when unknown or empty."""
    last = stored.get("last_time")
    # a restarted solver may reach the same time with other rounding
    return None if last is None else float(last) + RESUME_MARGIN_FRACTION * abs(float(last))


def _first_length(stored: Mapping[str, Any]) -> int | None:
    """Snapshots of the next batch when other parts have sent theirs, as before a restart; None when free."""
    expected = stored.get("expected_snapshots")
    return None if expected is None else int(expected)


def _copy(values: npt.ArrayLike, target: npt.NDArray[Any]) -> None:
    """Copy one field or one snapshot, whatever its grid shape, into its place."""
    array = np.asarray(values)
    if array.size != target.size:
        raise ValueError(f"got values of shape {array.shape}, declared are {target.shape} (fields, points)")
    np.copyto(target, array.reshape(target.shape), casting="same_kind")
