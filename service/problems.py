"""Every refusal of the service, as a problem document (RFC 9457).

`Problem` is the one error that handlers raise; `CATALOGUE` lists all types there are, each with its status and
title. The ``type`` is stable and relative, and GET on it describes it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

PROBLEM_JSON = "application/problem+json"


@dataclass(frozen=True)
class ProblemType:
    """One kind of refusal: HTTP status, title, and what a client should do."""

    status: int
    title: str
    advice: str


CATALOGUE: dict[str, ProblemType] = {
    "bad-request": ProblemType(400, "The request cannot be understood", "Correct the request."),
    "bad-digest-header": ProblemType(
        400, "Content-Digest cannot be read", "Send sha-256=:<base64>: as in RFC 9530, or leave the header out."
    ),
    "digest-mismatch": ProblemType(
        400, "The body does not match its Content-Digest", "The body was damaged on its way: send it again."
    ),
    "torn-body": ProblemType(400, "The body ended early", "Send the batch again; nothing of it was stored."),
    "token-needed": ProblemType(401, "A bearer token is needed", "Send Authorization: Bearer <token>."),
    "host-refused": ProblemType(403, "Host not served here", "Use the address that the service printed."),
    "not-found": ProblemType(404, "There is no such resource", "See /docs for the operations."),
    "unknown-run": ProblemType(404, "There is no such run", "List the runs with GET /v1/runs."),
    "unknown-part": ProblemType(404, "There is no such part", "Parts are numbered from 0 as in the declaration."),
    "not-yet": ProblemType(
        404, "Nothing has been computed yet", "Post more snapshots: the first result needs one full block."
    ),
    "method-not-allowed": ProblemType(405, "Method not allowed", "See /docs for the operations."),
    "not-acceptable": ProblemType(406, "Not in that form", "Ask for application/x-npy or application/json."),
    "idle-body": ProblemType(408, "The body stopped coming", "Send the batch again; nothing was stored."),
    "sequence-conflict": ProblemType(
        409,
        "Another batch is stored under this sequence number",
        "A stored batch is never replaced: send new data under the run's next_sequence.",
    ),
    "parts-disagree": ProblemType(
        409,
        "The parts of this batch differ in snapshots or times",
        "All parts cut their snapshots into the same batches, with the same times.",
    ),
    "comes-in-parts": ProblemType(
        409, "The run comes in parts", "PUT /v1/runs/{run_id}/parts/{part}/batches/{sequence} takes each part."
    ),
    "comes-whole": ProblemType(
        409, "The run was declared without parts", "PUT /v1/runs/{run_id}/batches/{sequence} takes whole snapshots."
    ),
    "run-closed": ProblemType(409, "The run is closed", "Declare a new run for more snapshots."),
    "run-failed": ProblemType(409, "The run has failed", "Read its reason; declare a new run."),
    "gap-open": ProblemType(
        409, "A batch is missing", "Send the missing batch, then close; or close with leave_out_waiting=true."
    ),
    "already-started": ProblemType(
        409, "The run already holds snapshots", "Give this before the first batch, or declare a new run."
    ),
    "length-needed": ProblemType(411, "Content-Length is missing", "Send the body with its length."),
    "body-too-large": ProblemType(413, "The body is too large", "Send fewer snapshots in one batch."),
    "wrong-media-type": ProblemType(
        415, "The body is of another type", "Send Content-Type: application/x-npy (or application/octet-stream)."
    ),
    "invalid-request": ProblemType(422, "A value is missing or out of range", "Correct the listed values."),
    "invalid-array": ProblemType(
        422, "The body is no acceptable NPY array", "Save it with numpy.save: plain floats, C order."
    ),
    "wrong-shape": ProblemType(422, "The array does not fit the declaration", "Send one of the listed shapes."),
    "not-finite": ProblemType(
        422, "The batch holds NaN or infinite values", "Look at the named place; leave bad snapshots out."
    ),
    "wrong-times": ProblemType(422, "The times do not fit", "Times must be finite and strictly increasing."),
    "wrong-values": ProblemType(422, "The values do not fit", "Correct the named values."),
    "run-too-large": ProblemType(
        422, "The run needs more memory than allowed", "Lower the rank or the block length, or raise the limit."
    ),
    "key-reused": ProblemType(422, "This Idempotency-Key came with other bytes before", "Use a new key for new data."),
    "no-picture": ProblemType(422, "This cannot be drawn", "Fetch the array instead."),
    "no-place": ProblemType(422, "Nothing is known of where the points are", "Fetch the array as NPY instead."),
    "export-too-large": ProblemType(422, "The export would be too large", "Ask for less, or take the archive."),
    "busy": ProblemType(429, "Too much is waiting to be applied", "Send again after Retry-After seconds."),
    "too-many-runs": ProblemType(429, "No room for another run", "Delete runs that are no longer needed."),
    "internal": ProblemType(500, "The service failed", "Look at the service's log; the request may be repeated."),
    "not-durable": ProblemType(
        503,
        "Storage has failed and nothing more is accepted",
        "Check the disk of the service and start it again; send again after that.",
    ),
    "stopping": ProblemType(503, "The service is stopping or overloaded", "Send again after Retry-After."),
    "disk-full": ProblemType(507, "The disk is nearly full", "Free space; send again after Retry-After seconds."),
}


class Problem(Exception):
    """A refusal of the given kind; ``detail`` holds the offending values and what to do."""

    def __init__(
        self,
        kind: str,
        detail: str,
        *,
        headers: Mapping[str, str] | None = None,
        retry_after_seconds: int | None = None,
        **members: Any,
    ) -> None:
        super().__init__(detail)
        self.kind = kind
        self.detail = detail
        self.members = members
        self.headers = dict(headers or {})
        if retry_after_seconds is not None:
            self.headers["Retry-After"] = str(retry_after_seconds)

    @property
    def status(self) -> int:
        return CATALOGUE[self.kind].status

    def document(self) -> dict[str, Any]:
        """The problem document as a JSON-ready mapping."""
        return {
            "type": f"/problems/{self.kind}",
            "title": CATALOGUE[self.kind].title,
            "status": self.status,
            "detail": self.detail,
            **self.members,
        }
