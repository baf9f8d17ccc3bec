"""The way in for raw bodies: admitted, streamed to a draft, committed, and only then answered."""

from __future__ import annotations

import asyncio
import base64
import binascii
import re
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass

from starlette.requests import ClientDisconnect, Request

from service.commit import BUSY_SECONDS, Offer, check_open, commit_batch, repeat_of
from service.core import Service
from service.durable import check_free_space, storage_problem
from service.journal import Draft
from service.npy import ArrayHeader
from service.parts import find_declared
from service.problems import Problem
from service.records import BatchRecord, RunRecord
from service.shapes import Expected, expect_batch, expect_part
from service.times import TimesGiven

# Pieces handed to a thread: large enough that the hand-over costs nothing, small beside any bound on memory.
PIECE_BYTES = 2**20
MEDIA_TYPES = ("application/x-npy", "application/npy", "application/octet-stream")
_DIGEST = re.compile(r"sha-256=:([A-Za-z0-9+/]{43}=):")


@dataclass(frozen=True)
class Body:
    """A whole body on disk under a draft name."""

    draft: Draft
    header: ArrayHeader
    digest: bytes


def check_headers(request: Request, max_body_bytes: int) -> int:
    """Return the length of the body. Raises the 411, 413 and 415 problems."""
    media_type = request.headers.get("content-type", MEDIA_TYPES[0]).split(";")[0].strip().lower()
    if media_type not in MEDIA_TYPES:
        raise Problem(
            "wrong-media-type",
            f"the body came as {media_type[:80]!r}; send the NPY file with Content-Type: application/x-npy",
        )
    if request.headers.get("content-encoding", "identity") != "identity":
        raise Problem("wrong-media-type", "the body is encoded; send it as it is")
    length = request.headers.get("content-length")
    if length is None or not length.isdecimal():
        raise Problem("length-needed", "the body came without Content-Length; send it with its length, not chunked")
    if int(length) > max_body_bytes:
        raise Problem(
            "body-too-large",
            f"the body has {length} bytes, at most {max_body_bytes} are taken; send fewer snapshots in one batch",
            limit=max_body_bytes,
        )
    return int(length)


def parse_digest(text: str | None) -> bytes | None:
    """The sha-256 of a Content-Digest field (RFC 9530), None without one. Raises the 400 problem."""
    if text is None:
        return None
    match = _DIGEST.search(text)
    if match is None:
        raise Problem("bad-digest-header", f"Content-Digest {text[:100]!r} holds no sha-256=:<base64>:")
    try:
        return base64.b64decode(match[1], validate=True)
    except binascii.Error as error:
        raise Problem("bad-digest-header", "Content-Digest holds no valid base64") from error


def check_capacity(service: Service, run: RunRecord, sequence: int | None, n_bytes: int) -> None:
    """Raise the 429, 503 and 507 problems when the body cannot be kept now."""
    service.poison.check()
    check_free_space(service.folders.root, n_bytes + service.incoming_bytes, service.settings.min_free_bytes)
    backlog = service.reader.backlog(run.id)
    closes_gap = backlog.n_waiting > 0 and sequence == run.next_sequence
    if backlog.n_bytes + n_bytes > journal_limit_bytes(service, run) and not closes_gap:
        raise Problem(
            "busy",
            f"{backlog.n_batches} batches ({backlog.n_bytes} bytes) of this run wait to be covered by a checkpoint; "
            "send again a little later",
            retry_after_seconds=BUSY_SECONDS,
        )


def journal_limit_bytes(service: Service, run: RunRecord) -> int:
    """The bound of the setting, or four blocks if that is more: with less no block could ever fill."""
    block = run.declaration.length_of_block * run.declaration.n_rows * 8
    return max(service.settings.max_journal_bytes, 4 * block)


@asynccontextmanager
async def received(
    request: Request, service: Service, run: RunRecord, expected: Expected, n_bytes: int
) -> AsyncIterator[Body]:
    """The checked body as a draft, which is gone afterwards unless it was kept."""
    if service.n_bodies >= service.settings.max_open_bodies:
        raise Problem(
            "busy",
            f"{service.n_bodies} bodies are being received; send again shortly",
            retry_after_seconds=BUSY_SECONDS,
        )
    wanted = parse_digest(request.headers.get("content-digest"))
    service.n_bodies += 1
    service.incoming_bytes += n_bytes
    draft = None
    try:
        folder = service.folders.run(run.id)
        if not folder.journal.is_dir():  # the disk was full when the run was declared
            folder.create(service.poison)
        draft = Draft(folder.journal, n_bytes, expected, service.poison)
        await _pour(request, service, draft)
        header, digest = draft.digest()
        if wanted is not None and wanted != digest:
            raise Problem(
                "digest-mismatch",
                f"the body has sha-256 {digest.hex()}, Content-Digest says {wanted.hex()}; send it again",
            )
        yield Body(draft, header, digest)
    except OSError as error:
        raise storage_problem(error) from error
    finally:
        service.n_bodies -= 1
        service.incoming_bytes -= n_bytes
        if draft is not None:
            draft.discard()


async def _pour(request: Request, service: Service, draft: Draft) -> None:
    """Write the body to the draft in a thread, one piece while the next one comes."""
    loop = asyncio.get_running_loop()
    writing: asyncio.Future[None] | None = None
    try:
        async for piece in _pieces(request, service, draft):
            if writing is not None:
                await writing
            writing = loop.run_in_executor(service.bodies, draft.write, piece)
    finally:
        if writing is not None:
            await writing


async def _pieces(request: Request, service: Service, draft: Draft) -> AsyncIterator[bytes]:
    """The body in pieces of about PIECE_BYTES. Raises the 400 and 408 problems when it stops."""
    piece = bytearray()
    stream = request.stream().__aiter__()
    try:
        while True:
            async with asyncio.timeout(service.settings.body_idle_seconds):
                chunk = await anext(stream, None)
            piece += chunk or b""
            if piece and (chunk is None or len(piece) >= PIECE_BYTES):
                yield bytes(piece)
                piece.clear()
            if chunk is None:
                return
    except TimeoutError as error:
        raise Problem(
            "idle-body",
            f"nothing came for {service.settings.body_idle_seconds:g} seconds after {draft.received_bytes} bytes",
        ) from error
    except ClientDisconnect as error:
        raise Problem("torn-body", f"the connection ended after {draft.received_bytes} bytes") from error


async def store_batch(
    request: Request,
    service: Service,
    run_id: str,
    part: int | None,
    sequence: int | None,
    key: str | None,
    given: TimesGiven,
) -> tuple[BatchRecord, bool]:
    """Store one batch, or one part of it, durably, or recognise it. Returns its record, and whether it is a repeat."""
    run = service.reader.run(run_id)
    declared = find_declared(run, part)
    n_bytes = check_headers(request, service.settings.max_body_bytes)
    existing = _stored(service, run_id, sequence, key, part)
    if existing is None:
        check_open(run)
        check_capacity(service, run, sequence, n_bytes)
    most = service.settings.max_snapshots_per_batch
    expected = expect_part(run.declaration, declared, most) if declared else expect_batch(run.declaration, most)
    async with received(request, service, run, expected, n_bytes) as body:
        n_snapshots = body.header.shape[0]
        times = given.for_batch(n_snapshots, run.declaration)
        offer = Offer(run_id, sequence, key, body.digest, n_snapshots, n_bytes, times, part)
        repeat = repeat_of(_stored(service, run_id, sequence, key, part), offer)
        if repeat is not None:
            return repeat, True
        loop = asyncio.get_running_loop()
        await loop.run_in_executor(service.bodies, body.draft.sync)
        # Shielded: a commit that has begun is carried through even if the client goes away.
        return await asyncio.shield(loop.run_in_executor(service.commits, _commit, service, body.draft, offer))


def _stored(
    service: Service, run_id: str, sequence: int | None, key: str | None, part: int | None
) -> BatchRecord | None:
    if sequence is not None:
        return service.reader.batch(run_id, sequence, part)
    return None if key is None else service.reader.batch_with_key(run_id, key)


def _commit(service: Service, draft: Draft, offer: Offer) -> tuple[BatchRecord, bool]:
    folder = service.folders.run(offer.run_id)
    stored = commit_batch(service.registry, folder, draft, offer, service.settings.max_waiting_batches)
    service.worker.wake(offer.run_id)
    return stored
