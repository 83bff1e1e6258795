"""Ctrl-C and SIGTERM as requests: the first lets the point in hand end, the second breaks it off.

Signals arrive in the main thread between two bytecodes. The first Ctrl-C only leaves a note that the loop reads between
points and during soaks. The second, or a SIGTERM (somebody is shutting the machine down and will not wait for a soak),
raises `StopAtOnce` wherever the run is. While the bench is being made safe nothing is raised any more: there is nothing
more urgent than that.
"""

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

from runner.sweep.clock import Clock

_GLANCE = 1.0  # s of wall time between two looks at the note during a long sleep


class StopAtOnce(BaseException):
    """Broken off by a second Ctrl-C or SIGTERM. Not an Exception, so that no fault handling swallows it."""


class StopRequests:
    """What was asked for so far.

    Attributes:
        why: what was asked for first, "" if nothing.
    """

    def __init__(self) -> None:
        self.why = ""
        self._shielded = False

    @property
    def is_asked(self) -> bool:
        """A stop was asked for; end at the next point."""
        return bool(self.why)

    def ask(self, number: int, frame: FrameType | None = None) -> None:
        """A signal arrived.

        Raises:
            StopAtOnce: it was not the first, or it was not Ctrl-C.
        """
        repeated = self.is_asked
        name = "Ctrl-C" if number == signal.SIGINT else signal.Signals(number).name
        self.why = self.why or f"stopped by {name}"
        if (repeated or number != signal.SIGINT) and not self._shielded:
            self.why = f"stopped at once by {name}"
            raise StopAtOnce(self.why)

    @contextmanager
    def listening(self) -> Iterator[None]:
        """Handle SIGINT and SIGTERM inside; outside the main thread (a test) nothing is installed."""
        if threading.current_thread() is not threading.main_thread():
            yield
            return
        before = {number: signal.signal(number, self.ask) for number in (signal.SIGINT, signal.SIGTERM)}
        try:
            yield
        finally:
            for number, handler in before.items():
                signal.signal(number, handler)

    @contextmanager
    def shielded(self) -> Iterator[None]:
        """Nothing is raised inside: for the way to the safe state."""
        self._shielded = True
        try:
            yield
        finally:
            self._shielded = False


def doze(clock: Clock, seconds: float, requests: StopRequests) -> float:
    """Sleep between two polls of a soak, ending early when a stop is asked for; gives the time afterwards [UTC s]."""
    if clock.is_simulated or seconds <= _GLANCE:
        return clock.sleep(seconds)
    end = clock.now() + seconds
    now = clock.now()
    while now < end and not requests.is_asked:
        now = clock.sleep(min(_GLANCE, end - now))
    return now
