"""Telling the service manager that started us how far we are, by the datagram of sd_notify(3); nothing without one."""

from __future__ import annotations

import logging
import os
import socket

logger = logging.getLogger("slackwater")


def tell_manager(state: str) -> None:
    """Send a state such as ``READY=1`` to the socket named in NOTIFY_SOCKET; a failure is logged and harmless."""
    address = os.environ.get("NOTIFY_SOCKET", "")
    if not address:
        return
    if address[0] == "@":  # an abstract socket
        address = f"\0{address[1:]}"
    try:
        with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as channel:
            channel.sendto(state.encode(), address)
    except OSError as error:
        logger.warning("the service manager could not be told %s: %s", state, error)
