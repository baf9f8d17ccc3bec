"""A relay in front of the service: it loses receipts when asked to, and seems dead once it is closed."""

from __future__ import annotations

import contextlib
import socket
import threading


class CuttingProxy:
    """Relays connections to ``target_port``; the answers to the first ``n_cuts`` PUTs never arrive."""

    def __init__(self, target_port: int, n_cuts: int = 0) -> None:
        self._target_port = target_port
        self._cuts_left = n_cuts
        self.n_cut = 0
        self._open: list[socket.socket] = []
        self._lock = threading.Lock()
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.url = f"http://127.0.0.1:{self._listener.getsockname()[1]}"
        self._thread = threading.Thread(target=self._accept, daemon=True)
        self._thread.start()

    def close(self) -> None:
        """Refuse new connections and cut those that are open."""
        _shut(self._listener)
        self._listener.close()
        self._thread.join(5.0)
        for connection in self._open:
            _shut(connection)

    def _accept(self) -> None:
        while True:
            try:
                client, _ = self._listener.accept()
            except OSError:
                return
            self._open.append(client)
            threading.Thread(target=self._relay, args=(client,), daemon=True).start()

    def _relay(self, client: socket.socket) -> None:
        """Pass bytes both ways until either side ends, or until an answer is to be lost."""
        with client, socket.create_connection(("127.0.0.1", self._target_port)) as server:
            cutting = threading.Event()
            upward = threading.Thread(target=self._pass_up, args=(client, server, cutting), daemon=True)
            upward.start()
            while answer := _received(server):
                if cutting.is_set():
                    cutting.clear()
                    self.n_cut += 1
                    _shut(client)
                    return
                client.sendall(answer)

    def _pass_up(self, client: socket.socket, server: socket.socket, cutting: threading.Event) -> None:
        while request := _received(client):
            with self._lock:
                if request.startswith(b"PUT ") and self._cuts_left:
                    self._cuts_left -= 1
                    cutting.set()
            server.sendall(request)


def _shut(connection: socket.socket) -> None:
    with contextlib.suppress(OSError):  # ended already
        connection.shutdown(socket.SHUT_RDWR)


def _received(connection: socket.socket) -> bytes:
    try:
        return connection.recv(1 << 16)
    except OSError:
        return b""
