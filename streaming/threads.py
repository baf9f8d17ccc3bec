"""The threads that work on tall rows side by side."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from functools import cache

MAX_THREADS = 32


@cache
def threads() -> ThreadPoolExecutor:
    """Return the pool, one thread for each processor, or as many as SLACKWATER_THREADS says."""
    count = int(os.environ.get("SLACKWATER_THREADS", 0)) or len(os.sched_getaffinity(0))
    return ThreadPoolExecutor(min(count, MAX_THREADS), thread_name_prefix="rows")
