"""The one source of time in a run: `now` (UTC seconds) and `sleep`.

On a real bench that is the wall clock, kept from stepping back by the monotonic clock. On a simulated bench it is the
mock world's own clock, moved over its control socket: a soak of an hour is one message, and nothing in the loop can
tell the difference. A question to the bench's clock is a round trip, so `sleep` hands back the time it ended at.
"""

import json
import socket
import time
from collections.abc import Callable
from typing import Any, Protocol

_SLICE = 0.25  # s, a real sleep is cut into naps this long so that heartbeat and signals are served
_CONTROL_TIMEOUT = 30.0  # s of wall time; the world answers in well under a millisecond


class Clock(Protocol):
    """What the loop needs of time."""

    is_simulated: bool

    def now(self) -> float:
        """UTC seconds since 1970; never steps back."""

    def sleep(self, seconds: float) -> float:
        """Wait, then give the time it is [UTC s]."""


def _nothing() -> None:
    pass


class WallClock:
    """Wall clock at its making, monotonic from then on.

    Args:
        between: called in each nap (heartbeat); may raise to break off the sleep.
        not_before: a resumed run's clock starts after the last journal entry [UTC s].
    """

    is_simulated = False

    def __init__(self, *, between: Callable[[], None] = _nothing, not_before: float = 0.0) -> None:
        self._between = between
        self._offset = max(time.time(), not_before) - time.monotonic()

    def now(self) -> float:
        return self._offset + time.monotonic()

    def sleep(self, seconds: float) -> float:
        end = time.monotonic() + seconds
        while (left := end - time.monotonic()) > 0:
            self._between()
            time.sleep(min(left, _SLICE))
        return self.now()


class BenchClock:
    """The mock world's clock behind its control socket; the world counts from 0, `start` is added.

    Args:
        port: the control port on the loopback interface.
        start: UTC time at the world's second 0 [s].
        between: called before each sleep (heartbeat).
    """

    is_simulated = True

    def __init__(self, port: int, *, start: float, between: Callable[[], None] = _nothing) -> None:
        self._start = start
        self._between = between
        self._socket = socket.create_connection(("127.0.0.1", port), timeout=_CONTROL_TIMEOUT)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._replies = self._socket.makefile("rb")

    def now(self) -> float:
        return self._start + float(self.ask({"do": "now"})["now"])

    def sleep(self, seconds: float) -> float:
        self._between()
        return self._start + float(self.ask({"do": "advance", "seconds": max(seconds, 0.0)})["now"])

    def ask(self, request: dict[str, Any]) -> dict[str, Any]:
        """One request of the control socket, as JSON lines.

        Raises:
            ConnectionError: the world has gone.
        """
        self._socket.sendall(json.dumps(request).encode() + b"\n")
        line = self._replies.readline()
        if not line:
            raise ConnectionError("the simulated bench closed its control socket")
        reply: dict[str, Any] = json.loads(line)
        return reply

    def close(self) -> None:
        self._replies.close()
        self._socket.close()
