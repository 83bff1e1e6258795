"""What the house says when something is wrong, sorted by who must act.

The user acts on `InputError` (exit 2), whoever stands at the bench on `BenchError`, and `SafeStop` says that a limit or
a request ended the run with the bench in its safe state (both exit 1). Anything else is a fault of ours and may crash.
"""

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that is wrong with an input: where it stands, and what to do about it."""

    where: str
    what: str

    def __str__(self) -> str:
        return f"{self.where}: {self.what}" if self.where else self.what


class KneemapError(Exception):
    """A failure that a user can understand; its text is the whole message."""

    exit_status = 1


class InputError(KneemapError):
    """The input is wrong: all the faults found in it at once."""

    exit_status = 2

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


class BenchError(KneemapError):
    """An instrument was lost, refused a setting or answered with garbage."""


class SafeStop(KneemapError):
    """A limit or a request stopped the run; the bench is in its safe state."""
