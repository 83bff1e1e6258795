"""Faults that a test asks for, one role at a time: when they strike, and what they do to a message or its reply.

A fault lets ``after`` messages of its role pass, then strikes ``count`` times (0: from then on). Kinds that spoil
a reply count only messages that have one (an overloaded digitizer: captures). ``silent`` carries the message out
and keeps the reply back; ``deaf`` does neither.
"""

import re
from dataclasses import dataclass, field

import numpy as np

REPLY_KINDS = ("silent", "slow", "garbage", "half", "overload", "stuck")
MESSAGE_KINDS = ("deaf", "close", "error", "restart", "identity")
KINDS = (*REPLY_KINDS, *MESSAGE_KINDS)
PART_KINDS = ("open", "short")

# What a stuck instrument repeats: measured values, never its errors or its state.
_MEASURED = re.compile(rb"MEAS|READ\?|FETC|FETCH|TRAC(E)?(:DATA)?\?|TRAC(E)?:READ\?|FRES|^RES|^T$", re.I)


@dataclass(slots=True)
class Fault:
    """One fault; ``after`` and ``count`` are used up as it goes. ``seconds``: wall time of a ``slow`` answer."""

    kind: str
    after: int = 0
    count: int = 1
    seconds: float = 0.3
    channel: int = 1
    struck: int = 0

    def strikes(self) -> bool:
        """Count one message; True if it is hit."""
        if self.after > 0:
            self.after -= 1
            return False
        if self.count and self.struck >= self.count:
            return False
        self.struck += 1
        return True

    @property
    def spent(self) -> bool:
        return bool(self.count) and self.struck >= self.count


@dataclass(slots=True)
class Stuck:
    """Last reply to each measuring message, for an instrument whose value sticks."""

    replies: dict[bytes, bytes] = field(default_factory=dict)

    @staticmethod
    def measures(message: bytes) -> bool:
        return _MEASURED.search(message) is not None

    def remember(self, message: bytes, reply: bytes) -> None:
        if len(self.replies) > 64:
            self.replies.clear()
        self.replies[message] = reply


def garbled(reply: bytes, noise: np.random.Generator) -> bytes:
    """Noise of about the length of a reply, free of line ends."""
    raw = noise.integers(33, 255, max(4, min(64, len(reply))), dtype=np.uint8).tobytes()
    return raw.replace(b"\n", b"?").replace(b"\r", b"?")
