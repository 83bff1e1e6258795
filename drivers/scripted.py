"""A session that follows a script: the public test double of `VisaSession`, failing like the real one.

session = ScriptedSession([("MEAS:VOLT?", "12.01"), ("MEAS:CURR?", SILENCE)], role="supply")
"""

from collections.abc import Iterable

from drivers.errors import Disconnected, Garbled, NoReply

SILENCE = None  # no reply comes
CLOSED = Disconnected  # the connection is closed instead of a reply


class ScriptedSession:
    """Expects the lines of a script, in order, and answers as the script says.

    Args:
        script: what is sent (without terminator) and the reply: text or bytes (the terminator is added to
        text),
            `SILENCE`, `CLOSED`, or bytes without the terminator for half a reply.
        send, reply: terminators each way.
    """

    timeout = 2.0

    def __init__(
        self,
        script: Iterable[tuple[str, str | bytes | type[Disconnected] | None]],
        *,
        role: str = "supply",
        send: bytes = b"\n",
        reply: bytes = b"\n",
    ) -> None:
        self.role = role
        self.resource = "SCRIPT"
        self.sent: list[str] = []
        self.reopened = 0
        self._script = list(script)
        self._send = send
        self._reply = reply
        self._pending = b""
        self._has_begun = False  # some of the reply to the last line was read
        self._is_closed = False

    @property
    def is_finished(self) -> bool:
        return not self._script and not self._pending

    def write(self, message: bytes) -> None:
        if self._is_closed:
            raise Disconnected(
                self.role, self.resource, f"the connection is closed; {message!r} was not sent"
            )
        assert message.endswith(self._send), f"{message!r} does not end with {self._send!r}"
        text = message.removesuffix(self._send).decode("ascii")
        self.sent.append(text)
        assert self._script, f"the script is over, but {text!r} was sent"
        expected, reply = self._script.pop(0)
        assert text == expected, f"the script expects {expected!r}, but {text!r} was sent"
        self._is_closed = reply is CLOSED
        self._has_begun = False
        if isinstance(reply, str):
            self._pending += reply.encode("ascii") + self._reply
        elif isinstance(reply, bytes):
            self._pending += reply

    def read_line(self) -> bytes:
        if self._reply not in self._pending:
            self._fail()
        line, self._pending = self._pending.split(self._reply, 1)
        self._has_begun = True
        return line

    def read_exactly(self, count: int) -> bytes:
        if len(self._pending) < count:
            self._fail()
        data, self._pending = self._pending[:count], self._pending[count:]
        self._has_begun = True
        return data

    def reopen(self) -> None:
        self._pending, self._is_closed = b"", False
        self.reopened += 1

    def close(self) -> None:
        self._is_closed = True

    def _fail(self) -> None:
        if self._is_closed:
            raise Disconnected(self.role, self.resource, "the connection was closed by the instrument")
        if self._pending or self._has_begun:
            raise Garbled(self.role, self.resource, "the reply broke off")
        raise NoReply(self.role, self.resource, f"no reply in {self.timeout:.1f} s")
