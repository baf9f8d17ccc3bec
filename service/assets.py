"""The files of the live page, read once and kept with their types and tags."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path

ROOT = Path(__file__).parent / "static"

# Only these are served; a browser refuses a module or a style sheet under any other type.
TYPES = {
    ".html": "text/html; charset=utf-8",
    ".css": "text/css; charset=utf-8",
    ".js": "text/javascript; charset=utf-8",
    ".svg": "image/svg+xml",
    ".txt": "text/plain; charset=utf-8",
}


@dataclass(frozen=True)
class Asset:
    """One file: its bytes, its media type, and a tag that changes with the bytes."""

    content: bytes
    media_type: str
    etag: str


@cache
def assets() -> Mapping[str, Asset]:
    """All files under their path below the folder; nothing else on disk can be reached through this."""
    files = (path for path in ROOT.rglob("*") if path.is_file() and path.suffix in TYPES)
    return {path.relative_to(ROOT).as_posix(): _read(path) for path in sorted(files)}


def _read(path: Path) -> Asset:
    content = path.read_bytes()
    return Asset(content, TYPES[path.suffix], f'"{hashlib.sha256(content).hexdigest()[:24]}"')
