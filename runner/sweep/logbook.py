"""The log of the night: every decision as an event with time, leg and kind. Readings of air and body go here too.

A run must not die of its own log: once the journal refuses (disk full), the refusal goes up once, as what stops the run;
on the way to the safe state after that, `best_effort` events are tried and forgotten.
"""

from runner.errors import KneemapError
from runner.record import EventRow, Journal, Level
from runner.sweep.clock import Clock

# Kinds of events, so that a reader of the code sees what a reader of the record can filter by.
KINDS = (
    "start",  # instruments opened, identities
    "lock",
    "leg",  # set-point sent, leg over
    "soak",  # decision of a soak
    "part",  # a part's points begin or end
    "climb",  # scouting, halts, stops
    "climb_end",  # last point of a climb or of a bias series that is complete; resume goes by it
    "part_end",  # a part that opened or shorted; resume goes by it
    "rest",  # no current until a part has cooled
    "seek",  # why a sought point lies where it does
    "fault",  # an instrument failed, and what is done about it
    "flag",  # why a point is flagged
    "limit",  # a limit was met
    "request",  # somebody asked for a stop
    "safe_state",  # the way to the safe state, step by step
    "stop",  # why the run ended early
    "end",
    "notify",
    "watchdog",  # written by the watchdog when it took over, or by the runner about it
    "record",  # consolidation
)


class Logbook:
    """Writes events with the time and the leg that is under way.

    Attributes:
        leg: index of the leg under way, -1 between legs.
    """

    def __init__(self, journal: Journal, clock: Clock) -> None:
        self._journal = journal
        self._clock = clock
        self.leg = -1

    def event(self, kind: str, text: str, level: Level = "info", *, point: int = -1) -> EventRow:
        """Note what was decided, and why; the row is given back for the screen."""
        row = self.row(kind, text, level, point=point)
        self._journal.event(row)
        return row

    def row(
        self, kind: str, text: str, level: Level = "info", *, t: float | None = None, point: int = -1
    ) -> EventRow:
        """An event to be recorded together with a point."""
        return EventRow(self._clock.now() if t is None else t, level, kind, text, point=point, leg=self.leg)

    def best_effort(self, kind: str, text: str, level: Level = "info") -> None:
        """Note it if that can be done; for the way to the safe state, where nothing may come between."""
        try:
            self.event(kind, text, level)
        except (KneemapError, OSError):
            # The disk refuses and has said so once, to whoever stops the run for it.
            return
