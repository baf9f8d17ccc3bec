"""A listener that answers each request with the next bytes of a script, whatever was asked."""

from __future__ import annotations

import contextlib
import re
import socket
import threading
from collections.abc import Sequence
from dataclasses import dataclass

ACCEPT_SECONDS = 30.0


@dataclass(frozen=True)
class Turn:
    """One answer: its bytes, sent ``piece`` at a time; ``reads_body`` False answers before the body has come."""

    answer: bytes
    piece: int = 1 << 20
    reads_body: bool = True
    closes: bool = False


@dataclass(frozen=True)
class Asked:
    """One request as it came."""

    head: str
    body: bytes


def plain(status: str, body: str = "", fields: str = "") -> bytes:
    """An ordinary answer."""
    return f"HTTP/1.1 {status}\r\nContent-Length: {len(body.encode())}\r\n{fields}\r\n{body}".encode()


class ScriptedPeer:
    """Plays one turn for each request; the last one again and again."""

    def __init__(self, turns: Sequence[Turn]) -> None:
        self._turns = list(turns)
        self.asked: list[Asked] = []
        self._listener = socket.create_server(("127.0.0.1", 0))
        self._listener.settimeout(ACCEPT_SECONDS)
        self.url = f"http://127.0.0.1:{self._listener.getsockname()[1]}"
        self._thread = threading.Thread(target=self._serve, daemon=True)
        self._thread.start()

    def close(self) -> None:
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self._thread.join(5.0)

    def _serve(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                connection, _ = self._listener.accept()
                with connection, contextlib.suppress(OSError):
                    connection.settimeout(ACCEPT_SECONDS)
                    self._talk(connection)

    def _talk(self, connection: socket.socket) -> None:
        """One connection after the other: the client holds no more than one at a time."""
        held = b""
        while True:
            while b"\r\n\r\n" not in held:
                came = connection.recv(1 << 16)
                if not came:
                    return
                held += came
            head, held = held.split(b"\r\n\r\n", 1)
            turn = self._turns.pop(0) if len(self._turns) > 1 else self._turns[0]
            text = head.decode("latin-1")
            body = b""
            if turn.reads_body:
                if "100-continue" in text:
                    connection.sendall(b"HTTP/1.1 100 Continue\r\n\r\n")
                length = int(re.search(r"Content-Length: (\d+)", text)[1])  # type: ignore[index]
                while len(held) < length:
                    held += connection.recv(1 << 16)
                body, held = held[:length], held[length:]
            self.asked.append(Asked(text, body))
            for start in range(0, len(turn.answer), turn.piece):
                connection.sendall(turn.answer[start : start + turn.piece])
            if turn.closes or not turn.reads_body:
                return
