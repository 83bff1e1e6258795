"""What the room says when the disk, not the user, is at fault."""

from runner.errors import Fault, InputError, KneemapError


class RecordError(KneemapError):
    """The disk refused, or what it holds is damaged. The text says what is safe and what to do."""


def not_a_run(where: object, what: str) -> InputError:
    """The one way this room refuses a path that somebody gave it."""
    return InputError([Fault(str(where), what)])
