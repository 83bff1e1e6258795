"""Faults as the loop sees them: what the drivers raised, or a reading that cannot be right, sorted into kinds."""

from drivers import Disconnected, Garbled, InstrumentError, NoReply, Refused, Restarted
from runner.record import Flag
from runner.sweep.retry import Action, Kind

_KINDS: tuple[tuple[type[InstrumentError], Kind], ...] = (
    (NoReply, Kind.NO_REPLY),
    (Garbled, Kind.GARBLED),
    (Disconnected, Kind.DISCONNECTED),
    (Restarted, Kind.RESTARTED),
    (Refused, Kind.REFUSED),
)


class BadReading(Exception):
    """An instrument answered in good form, but what it said cannot be used.

    Attributes:
        kind: what is wrong with it.
        role: whose reading, or "part".
    """

    def __init__(self, kind: Kind, role: str, what: str) -> None:
        super().__init__(f"{role}: {what}")
        self.kind = kind
        self.role = role


class GivenUp(Exception):
    """Trying is over; the loop does what the policy says.

    Attributes:
        action: skip the point, end the method, the part's points, the leg, or the run.
        kind: of the last fault.
    """

    def __init__(self, action: Action, kind: Kind, why: str) -> None:
        super().__init__(why)
        self.action = action
        self.kind = kind

    @property
    def flags(self) -> Flag:
        """Flags of a point that was given up for this."""
        return Flag.SKIPPED | _FLAGS.get(self.kind, Flag(0))


_FLAGS = {
    Kind.NO_TRIGGER: Flag.NO_TRIGGER,
    Kind.CLIPPED: Flag.CLIPPED,
    Kind.OVERLOAD: Flag.OVERLOAD,
    Kind.STUCK: Flag.STUCK_READING,
    Kind.OPEN: Flag.PART_OPEN,
    Kind.SHORT: Flag.PART_SHORT,
    Kind.RESTARTED: Flag.INSTRUMENT_RESTARTED,
}

Failure = InstrumentError | BadReading


def kind_of(failure: Failure) -> Kind:
    """The policy's word for it; an instrument's error that is none of the known ones counts as garbled."""
    if isinstance(failure, BadReading):
        return failure.kind
    return next((kind for error, kind in _KINDS if isinstance(failure, error)), Kind.GARBLED)
