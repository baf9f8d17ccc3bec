"""A relay in front of the service that loses receipts: the request goes through, the answer does not."""

from __future__ import annotations

import socket
import threading


class CuttingProxy:
    """Relays connections to ``target_port``; cuts the first ``n_cuts`` answers to a PUT."""

    def __init__(self, target_port: int, n_cuts: int) -> None:
        self._target_port = target_port
        self._cuts_left = n_cuts
        self.n_cut = 0
        self._lock = threading.Lock()
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.url = f"http://127.0.0.1:{self._listener.getsockname()[1]}"
        self._thread = threading.Thread(target=self._accept, daemon=True)
        self._thread.start()

    def close(self) -> None:
        self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self._thread.join(5.0)

    def _accept(self) -> None:
        while True:
            try:
                client, _ = self._listener.accept()
            except OSError:
                return
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
                    client.shutdown(socket.SHUT_RDWR)
                    return
                client.sendall(answer)

    def _pass_up(self, client: socket.socket, server: socket.socket, cutting: threading.Event) -> None:
        while request := _received(client):
            with self._lock:
                if request.startswith(b"PUT ") and self._cuts_left:
                    self._cuts_left -= 1
                    cutting.set()
            server.sendall(request)


def _received(connection: socket.socket) -> bytes:
    try:
        return connection.recv(1 << 16)
    except OSError:
        return b""
