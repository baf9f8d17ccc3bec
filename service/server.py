"""Running the application: one process, one event loop, and an end that open streams do not hold up."""

from __future__ import annotations

import socket
from types import FrameType

import uvicorn

from service.app import create_app
from service.core import Service
from service.settings import Settings

# A batch may name the time of each of its snapshots in the query, about 25 characters each.
MAX_HEAD_BYTES = 2**20
# After this, connections that still send or receive are cut; their bodies were not acknowledged.
GRACE_SECONDS = 2


class SlackwaterServer(uvicorn.Server):
    """Tells open streams and held requests to end as soon as the process is asked to."""

    def __init__(self, config: uvicorn.Config, service: Service) -> None:
        super().__init__(config)
        self._service = service

    def handle_exit(self, sig: int, frame: FrameType | None) -> None:
        self._service.bell.stop()
        super().handle_exit(sig, frame)


def listen(settings: Settings) -> socket.socket:
    """The listening socket; opened first, so that its port is known and a taken one is said plainly."""
    family = socket.AF_INET6 if ":" in settings.host else socket.AF_INET
    # With the protocol named, asyncio sends at once; without it each answer waits 40 ms for an acknowledgement.
    listener = socket.socket(family, socket.SOCK_STREAM, socket.IPPROTO_TCP)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    listener.bind((settings.host.strip("[]"), settings.port))
    listener.listen(256)
    listener.set_inheritable(False)
    return listener


def address_of(settings: Settings, listener: socket.socket) -> str:
    """The address to tell people."""
    host = f"[{settings.host.strip('[]')}]" if ":" in settings.host else settings.host
    return f"http://{host}:{listener.getsockname()[1]}"


def serve(service: Service, listener: socket.socket) -> None:
    """Serve until SIGTERM or SIGINT."""
    config = uvicorn.Config(
        create_app(service),
        log_level="warning",
        access_log=False,
        server_header=False,
        h11_max_incomplete_event_size=MAX_HEAD_BYTES,
        timeout_graceful_shutdown=GRACE_SECONDS,
        lifespan="on",
    )
    SlackwaterServer(config, service).run(sockets=[listener])
