"""The sockets: one TCP port an instrument and one for control, any number of clients each, threads in this process.

Only loopback is bound. Everything that is decided is decided in `bench`; this file moves bytes and ends
cleanly.
"""

import contextlib
import json
import socket
import threading
import time
from collections.abc import Callable
from types import TracebackType

from mock_instruments.bench import Bench
from mock_instruments.spec import WorldSpec
from mock_instruments.world import World

LOOPBACK = "127.0.0.1"
CHUNK = 65536


class Served:
    """A bench being served from threads of this process, until closed (it is a context manager).

    ``ports`` by role, ``control`` the control port, ``world`` the physics behind them.
    """

    def __init__(self, spec: WorldSpec) -> None:
        self.bench = Bench(spec)
        self.quit = threading.Event()
        self._listeners: list[socket.socket] = []
        self._clients: set[socket.socket] = set()
        self._guard = threading.Lock()
        self._threads: list[threading.Thread] = []
        self._last_seen = time.monotonic()
        self.ports = {role: self._listen(self._talker(role)) for role in self.bench.instruments}
        self.control = self._listen(self._control)

    @property
    def world(self) -> World:
        return self.bench.world

    def idle_for(self) -> float:
        """Wall seconds since the last client left; 0 while there is one."""
        with self._guard:
            return 0.0 if self._clients else time.monotonic() - self._last_seen

    def close(self) -> None:
        """Stop listening, end every connection and wait for the threads."""
        self.quit.set()
        with self._guard:
            sockets = [*self._listeners, *self._clients]
        for each in sockets:
            # shutdown wakes a thread that is blocked in accept or recv; close alone does not.
            with contextlib.suppress(OSError):
                each.shutdown(socket.SHUT_RDWR)
            each.close()
        for thread in self._threads:
            if thread is not threading.current_thread():
                thread.join(timeout=5.0)

    def __enter__(self) -> "Served":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _listen(self, talk: Callable[[socket.socket], None]) -> int:
        listener = socket.create_server((LOOPBACK, 0), backlog=16)
        self._listeners.append(listener)
        self._start(lambda: self._accept(listener, talk))
        port: int = listener.getsockname()[1]
        return port

    def _accept(self, listener: socket.socket, talk: Callable[[socket.socket], None]) -> None:
        while not self.quit.is_set():
            try:
                client, _ = listener.accept()
            except OSError:
                return
            client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            with self._guard:
                self._clients.add(client)
            if self.quit.is_set():  # closed between accept and add: nobody else will end this one
                client.close()
                return
            self._start(lambda client=client: self._serve(client, talk))  # type: ignore[misc]  # bound now, on purpose

    def _serve(self, client: socket.socket, talk: Callable[[socket.socket], None]) -> None:
        try:
            with client, contextlib.suppress(OSError):
                talk(client)
        finally:
            with self._guard:
                self._clients.discard(client)
                self._last_seen = time.monotonic()

    def _start(self, run: Callable[[], None]) -> None:
        thread = threading.Thread(target=run, daemon=True)
        with self._guard:
            thread.start()
            self._threads = [*(each for each in self._threads if each.is_alive()), thread]

    def _talker(self, role: str) -> Callable[[socket.socket], None]:
        def talk(client: socket.socket) -> None:
            conversation = self.bench.conversation(role)
            while data := client.recv(CHUNK):
                for answer in conversation.feed(data):
                    if answer.wait:
                        self.quit.wait(answer.wait)
                    if answer.data:
                        client.sendall(answer.data)
                    if answer.close:
                        return

        return talk

    def _control(self, client: socket.socket) -> None:
        with client.makefile("rb") as lines:
            for line in lines:
                try:
                    request = json.loads(line)
                except ValueError as error:
                    request = {"do": f"not JSON: {error}"}
                reply = self.bench.control(request if isinstance(request, dict) else {"do": request})
                client.sendall(json.dumps(reply).encode() + b"\n")
                if reply.get("quit"):
                    self.quit.set()
                    return


def serve(spec: WorldSpec) -> Served:
    """Serve a bench on free loopback ports from threads of this process."""
    return Served(spec)
