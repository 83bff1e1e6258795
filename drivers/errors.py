"""What can go wrong with an instrument, as the rest of the house sees it.

Nobody above this room catches a VISA error. Every message names the role, the resource, what was sent, what
came of it and what to do.
"""


class InstrumentError(Exception):
    """An instrument was lost, refused or garbled something; its text is the whole message.

    Attributes:
        role: which instrument of the bench.
        resource: its VISA resource name.
    """

    def __init__(self, role: str, resource: str, what: str) -> None:
        self.role = role
        self.resource = resource
        self.what = what
        super().__init__(f"{role} ({resource}): {what}")


class NoReply(InstrumentError):
    """Nothing came back in time."""


class Garbled(InstrumentError):
    """Something came back, but not what the dialect says: half a reply, garbage, a broken block."""


class Disconnected(InstrumentError):
    """The connection is closed, or could not be made."""


class Restarted(InstrumentError):
    """The instrument was switched on anew since it was first talked to: its settings are lost."""


class Refused(InstrumentError):
    """The instrument understood and said no: its error queue was not empty, or a read-back disagrees.

    Attributes:
        errors: what it said, oldest first.
    """

    def __init__(self, role: str, resource: str, what: str, errors: tuple[str, ...] = ()) -> None:
        super().__init__(role, resource, what)
        self.errors = errors
