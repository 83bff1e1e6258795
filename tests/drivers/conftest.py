"""What the tests of this room share: the shipped dialects by file name, and the other end of a real socket."""

import contextlib
import socket
import threading
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from drivers import Dialect

DIALECTS = Path(__file__).resolve().parents[2] / "plans" / "dialects"


@pytest.fixture(scope="session")
def shipped() -> Callable[[str], Dialect]:
    return lambda name: Dialect.read(DIALECTS / f"{name}.yaml")


class Peer:
    """The other end of a real socket: answers each line with the next reply of its script, then does as it was told."""

    def __init__(self, replies: list[bytes | None]) -> None:
        self._replies = list(replies)
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.resource = f"TCPIP::127.0.0.1::{self._listener.getsockname()[1]}::SOCKET"
        self.heard: list[bytes] = []
        self.connections = 0
        self._open: list[socket.socket] = []
        self._thread = threading.Thread(target=self._serve, daemon=True)
        self._thread.start()

    def close(self) -> None:
        self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        for connection in self._open:
            connection.close()
        self._thread.join(timeout=5)

    def _serve(self) -> None:
        while True:
            try:
                connection, _ = self._listener.accept()
            except OSError:
                return
            self.connections += 1
            self._open.append(connection)
            threading.Thread(target=self._answer, args=(connection,), daemon=True).start()

    def _answer(self, connection: socket.socket) -> None:
        with connection, contextlib.suppress(OSError):
            while line := connection.recv(65536):
                self.heard.append(line)
                reply = self._replies.pop(0)
                if reply is None:
                    return  # closes the connection
                connection.sendall(reply)


@pytest.fixture
def peer() -> Iterator[Callable[..., Peer]]:
    """Makes peers: an empty reply is silence, None closes the connection instead."""
    with contextlib.ExitStack() as stack:

        def make(*replies: bytes | None) -> Peer:
            return stack.enter_context(contextlib.closing(Peer(list(replies))))

        yield make
