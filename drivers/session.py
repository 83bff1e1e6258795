"""The edge to an instrument: bytes out, bytes in.

Two implementations: `VisaSession`, and `ScriptedSession` for tests. A session knows neither dialects nor
roles. It has no memory that a `reopen` does not clear, so a conversation that fell out of step with its
instrument gets back into step by reopening.
"""

from typing import Protocol


class Session(Protocol):
    """A connection to one instrument.

    Every method raises `NoReply`, `Garbled` (part of a reply came, the rest did not) or `Disconnected`.
    """

    @property
    def role(self) -> str: ...

    @property
    def resource(self) -> str: ...

    @property
    def timeout(self) -> float:
        """How long a reply is waited for [s]."""

    def write(self, message: bytes) -> None:
        """Sends one line, its terminator included."""

    def read_line(self) -> bytes:
        """The reply up to the end of its line, without the terminator."""

    def read_exactly(self, count: int) -> bytes:
        """The next bytes of the reply, terminators among them or not."""

    def reopen(self) -> None:
        """Drops the connection and whatever was on its way, and connects anew."""

    def close(self) -> None:
        """Lets the instrument go; the settings of the instrument stay as they are."""
