"""Numbers for monitoring, in the OpenMetrics text format 1.0; labels are few and bounded."""

from __future__ import annotations

from collections.abc import Iterator

from service.core import Service

MEDIA_TYPE = "application/openmetrics-text; version=1.0.0; charset=utf-8"
_COUNTERS = {
    "batches_stored": "Batches, or parts of them, stored for the first time.",
    "batches_repeated": "Batches recognised as repeats.",
    "snapshots_stored": "Snapshots stored.",
    "bytes_stored": "Bytes of stored batches.",
}


def metrics_text(service: Service) -> str:
    """The whole answer."""
    return "\n".join([*_lines(service), "# EOF", ""])


def _lines(service: Service) -> Iterator[str]:
    for name, text in _COUNTERS.items():
        yield from _family(name, "counter", text)
        yield f"slackwater_{name}_total {service.counters[name]}"
    yield from _family("refusals", "counter", "Requests refused, by type of problem.")
    for name, count in sorted(service.counters.items()):
        if name.startswith("refused "):
            yield f'slackwater_refusals_total{{type="{name.removeprefix("refused ")}"}} {count}'
    yield from _family("runs", "gauge", "Runs by status.")
    counts = service.reader.counts()
    for status in ("open", "closing", "closed", "failed"):
        yield f'slackwater_runs{{status="{status}"}} {counts.get(status, 0)}'
    for name, value, text in (
        ("open_bodies", service.n_bodies, "Bodies being received."),
        ("event_streams", service.n_streams, "Event streams that are open."),
        ("held_requests", service.n_waits, "Requests that wait for a change."),
        ("runs_ready", service.worker.n_ready, "Runs with batches to apply."),
        ("storage_failed", int(service.poison.reason is not None), "1 after a failed sync."),
    ):
        yield from _family(name, "gauge", text)
        yield f"slackwater_{name} {value}"


def _family(name: str, kind: str, text: str) -> list[str]:
    return [f"# TYPE slackwater_{name} {kind}", f"# HELP slackwater_{name} {text}"]
