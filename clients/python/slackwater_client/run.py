"""One run of the service: post snapshots, read the verdict, the modes and the rest."""

from __future__ import annotations

import time
import uuid
from collections.abc import Iterator, Mapping
from functools import partial
from typing import TYPE_CHECKING, Any, cast
from urllib.parse import quote

import numpy as np
import numpy.typing as npt

from slackwater_client.answers import ConvergenceReport, Receipt, parse_receipt
from slackwater_client.npy import NpyBody
from slackwater_client.part import RunPart
from slackwater_client.patience import with_patience
from slackwater_client.transport import Parameters, Transport

if TYPE_CHECKING:
    from slackwater_client.hook import Hook

Array = npt.NDArray[np.floating[Any]]

MAX_TIMES_IN_QUERY = 1000  # about 30 kB of address; servers and proxies often end at 64 kB
EVEN_FRACTION = 1e-6  # of a step: far above rounding, far below any jitter that a spectrum would show
SHORTEST_WATCH_SECONDS = 0.5  # no verdict changes faster than this in a way that matters
LONGEST_HOLD_SECONDS = 20.0  # how long one request lets the service hold the answer; proxies often cut at 30
CLOSE_HOLD_SECONDS = 10.0  # how long the service holds the answer to a close while it applies what waits


class Run:
    """One run. Made by `Client.declare` and `Client.run`.

    Every method may raise `UnreachableError` (no answer) and `AccessError` (token) beside what it names.
    """

    stops_at_loss = False  # a hook leaves out a batch that is refused, and goes on with the next

    def __init__(self, transport: Transport, resource: Mapping[str, Any]) -> None:
        self._transport = transport
        self._resource: dict[str, Any] = dict(resource)
        self._path = f"/v1/runs/{quote(self.id, safe='')}"

    def __repr__(self) -> str:
        return f"<Run {self.id} {self.name!r} at {self._transport.url}>"

    @property
    def id(self) -> str:
        return str(self._resource["id"])

    @property
    def name(self) -> str:
        return str(self.declaration["name"])

    @property
    def declaration(self) -> dict[str, Any]:
        """The declaration as the service keeps it, defaults filled in."""
        return cast("dict[str, Any]", self._resource["declaration"])

    @property
    def resource(self) -> dict[str, Any]:
        """The run as last read from the service; `refresh` reads it again."""
        return self._resource

    @property
    def status(self) -> str:
        """Status of the run, read from the service now."""
        return str(self.refresh()["status"])

    @property
    def next_sequence(self) -> int:
        """Number for the next batch, read from the service now: where a restarted solver goes on."""
        return int(self.refresh()["next_sequence"])

    def refresh(self) -> dict[str, Any]:
        """Read the run from the service.

        Raises
        ------
        NotFoundError : the run is gone
        """
        self._resource = dict(self._transport.json("GET", self._path))
        return self._resource

    def put_weights(self, weights: npt.ArrayLike) -> None:
        """Give weights (cell volume or area), (n_points,) or (n_fields, n_points), before the first batch."""
        self._transport.send_array("PUT", f"{self._path}/weights", NpyBody(weights))

    def put_positions(self, positions: npt.ArrayLike) -> None:
        """Give the positions of the points, shape (n_points, 2 or 3), a length, before the first batch."""
        self._transport.send_array("PUT", f"{self._path}/positions", NpyBody(positions))

    def put_triangles(self, triangles: npt.ArrayLike) -> None:
        """Join scattered points to a surface, (n_triangles, 3), point numbers from 0, before the first batch."""
        self._transport.send_array("PUT", f"{self._path}/triangles", NpyBody(triangles))

    def post(
        self,
        snapshots: npt.ArrayLike,
        sequence: int | None = None,
        times: npt.ArrayLike | None = None,
        *,
        patience_seconds: float = 0.0,
    ) -> Receipt:
        """Post one batch and wait for its receipt; the batch is then on the disk of the service.

        Parameters
        ----------
        snapshots : (n, n_fields, n_points), (n, n_fields * n_points) or (n, n_fields, *grid shape)
        sequence : number of the batch, from 0, without gaps. A repeat under the same number is harmless.
            Without it the service numbers the batch; tries within one call still count once.
        times : (n,) in the time unit of the run; without them the declared time step holds. More than 1000
            must be evenly spaced.
        patience_seconds : how long to go on trying while the service is away, busy or full

        Raises
        ------
        InvalidError : wrong shape, a value that is not finite, too large; nothing was stored
        ConflictError : other snapshots have this number already, or the run is closed
        BusyError : still busy or full when the patience ended
        """
        body = NpyBody(snapshots)
        params = _time_parameters(times)
        if sequence is None:
            method, path = "POST", f"{self._path}/batches"
            headers = {"Idempotency-Key": str(uuid.uuid4())}
        else:
            method, path, headers = "PUT", f"{self._path}/batches/{int(sequence)}", {}
        answer = with_patience(
            lambda: self._transport.send_array(method, path, body, params, headers), patience_seconds
        )
        return parse_receipt(answer)

    def part(self, number: int) -> RunPart:
        """Part ``number`` of a run that was declared with parts, counted from 0; ValueError when there is none."""
        return RunPart(self, number)

    def post_part(
        self,
        part: int,
        snapshots: npt.ArrayLike,
        sequence: int,
        times: npt.ArrayLike | None = None,
        *,
        patience_seconds: float = 0.0,
    ) -> Receipt:
        """Post what one part has of a batch and wait for its receipt; see `post` for what is not said here.

        A batch is applied when all its parts are there, in whatever order they came; ``complete`` of the receipt says
        whether they are. All parts of a batch hold the same number of snapshots, with the same times.

        Parameters
        ----------
        part : number of the part as declared, from 0
        snapshots : (n, n_fields, stop - start) or (n, n_fields * (stop - start))

        Raises
        ------
        ConflictError : other snapshots of this part have this number, or the other parts of it differ in number of
            snapshots or in times; or the run is closed
        """
        body, params = NpyBody(snapshots), _time_parameters(times)
        path = f"{self._path}/parts/{int(part)}/batches/{int(sequence)}"
        answer = with_patience(lambda: self._transport.send_array("PUT", path, body, params, {}), patience_seconds)
        return parse_receipt(answer)

    def read_part(self, part: int) -> dict[str, Any]:
        """How far one part has come: its next number, and how many of its batches wait for other parts."""
        return dict(self._transport.json("GET", f"{self._path}/parts/{int(part)}"))

    def convergence(self) -> ConvergenceReport:
        """The latest numbers and the verdict."""
        return cast(ConvergenceReport, self._transport.json("GET", f"{self._path}/convergence"))

    def wait(self, timeout: float, *, patience_seconds: float = 0.0) -> ConvergenceReport:
        """Wait until the modes have settled, the run takes no more data, or ``timeout`` seconds have passed.

        Gives the last report; look at ``report["verdict"]["state"]`` to see which it was.
        """
        for report in self.watch(timeout, patience_seconds=patience_seconds):
            latest = report
        return latest

    def watch(
        self,
        timeout: float = float("inf"),
        *,
        patience_seconds: float = 0.0,
        hold: float = LONGEST_HOLD_SECONDS,
    ) -> Iterator[ConvergenceReport]:
        """Give a report now and every ``hold`` seconds or sooner, until settled, closed, failed or timed out.

        ``timeout`` and ``hold`` in seconds; ``resource`` is as fresh as the report. There is at least one.
        """
        deadline = time.monotonic() + timeout
        held = 0.0
        while True:
            asked = time.monotonic()
            report = with_patience(partial(self._held_convergence, held), patience_seconds)
            resource = with_patience(self.refresh, patience_seconds)
            over = str(resource["status"]) in OVER
            if over:  # what was read before the end may be older than the end
                report = with_patience(self.convergence, patience_seconds)
            yield report
            if over or report["verdict"]["state"] == "settled":
                return
            if held > 0.0:
                _rest_of_a_moment(asked, deadline)
            held = min(hold, deadline - time.monotonic())
            if held <= 0.0:
                return

    def _held_convergence(self, hold_seconds: float) -> ConvergenceReport:
        """The report as soon as it says settled, or after ``hold_seconds``."""
        params: Parameters | None = None
        if hold_seconds > 0.0:
            params = {"wait_for": "settled", "timeout": round(hold_seconds, 3)}
        path = f"{self._path}/convergence"
        return cast(ConvergenceReport, self._transport.json("GET", path, params=params, wait_seconds=hold_seconds))

    def modes(self, n: int | None = None) -> Array:
        """The leading modes, (n, n_fields, n_points), in field units and orthonormal under the weights."""
        return self._transport.array(f"{self._path}/modes", {"n": n} if n is not None else None)

    def mode(self, k: int) -> Array:
        """Mode ``k``, counted from 1, (n_fields, n_points)."""
        return self._transport.array(f"{self._path}/modes/{int(k)}")

    def mean(self) -> Array:
        """The mean of all snapshots in the basis, (n_fields, n_points)."""
        return self._transport.array(f"{self._path}/mean")

    def singular_values(self) -> Array:
        """Singular values, largest first, (r,)."""
        return self._transport.array(f"{self._path}/singular-values")

    def coefficients(self, n: int | None = None) -> tuple[Array, Array]:
        """Times (N,) and temporal coefficients (N, n) of the leading modes, one row for each snapshot."""
        values = self._transport.array(f"{self._path}/coefficients", {"n": n} if n is not None else None)
        times = self._transport.array(f"{self._path}/times")
        return times[: len(values)], values  # snapshots may have come in between

    def close(self) -> ConvergenceReport:
        """Say that no more data will come; what waits is still taken in, then the verdict is final."""
        self._transport.json("POST", f"{self._path}/close", wait_seconds=CLOSE_HOLD_SECONDS)
        return self.convergence()

    def delete(self) -> None:
        """Remove the run and all its data from the service, for good."""
        self._transport.json("DELETE", self._path)

    def hook(self, every: int = 1, batch: int = 8, **settings: Any) -> Hook:
        """What a solver calls at each step; see `slackwater_client.hook.Hook` for the settings."""
        from slackwater_client.hook import Hook

        return Hook(self, every=every, batch=batch, **settings)


OVER = frozenset({"closed", "failed"})


def _rest_of_a_moment(asked: float, deadline: float) -> None:
    """Pause after an answer that came early, as from a service that is stopping, so as not to loop busily."""
    end = min(asked + SHORTEST_WATCH_SECONDS, deadline)
    time.sleep(max(0.0, end - time.monotonic()))


def _time_parameters(times: npt.ArrayLike | None) -> Parameters | None:
    if times is None:
        return None
    values = np.asarray(times, dtype=np.float64)
    if values.ndim != 1 or not np.isfinite(values).all():
        raise ValueError(f"times must be finite and of shape (n,), got shape {values.shape}: {values}")
    if len(values) <= MAX_TIMES_IN_QUERY:
        return {"time": values.tolist()}
    step = float(values[-1] - values[0]) / (len(values) - 1)
    even = values[0] + step * np.arange(len(values))
    if np.abs(values - even).max() > EVEN_FRACTION * abs(step):
        raise ValueError(
            f"{len(values)} uneven times are too many for one request; post at most {MAX_TIMES_IN_QUERY} at once"
        )
    return {"start_time": float(values[0]), "time_step": step}
