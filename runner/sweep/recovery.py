"""Trying again, as the policy in `retry.py` decides: the one loop around everything that talks to an instrument."""

from collections import Counter
from collections.abc import Callable
from typing import TypeVar

from drivers import InstrumentError
from runner.record import Flag
from runner.sweep.bench import Bench
from runner.sweep.faults import BadReading, Failure, GivenUp, kind_of
from runner.sweep.logbook import Logbook
from runner.sweep.retry import Action, Kind, Phase, decide

Result = TypeVar("Result")


class Recovery:
    """Carries out actions on the bench and what the policy says when they fail.

    Attributes:
        flags: what the tries since the last `fresh_point` mean for the point (retried, restarted).
    """

    def __init__(
        self, bench: Bench, log: Logbook, tell: Callable[[str], None], beat: Callable[[], None] = lambda: None
    ) -> None:
        self._bench = bench
        self._log = log
        self._tell = tell
        self._beat = beat
        self._spent: Counter[str] = Counter()
        self.flags = Flag(0)

    def fresh_leg(self) -> None:
        """Every role gets its budget of faults anew."""
        self._spent.clear()

    def fresh_point(self) -> None:
        self.flags = Flag(0)

    def carry_out(
        self, phase: Phase, action: Callable[[], Result], *, larger: Callable[[], None] | None = None
    ) -> Result:
        """Do it, and do it again as often as the policy allows.

        Args:
            phase: where in the run.
            action: starts from the state the bench is in, and may be started again.
            larger: takes the next larger range, where a reading may be clipped.

        Raises:
            GivenUp: with what the policy gives up.
        """
        tried = 0
        while True:
            try:
                return action()
            except (InstrumentError, BadReading) as failure:
                self._answer(failure, phase, tried, larger)
                tried += 1

    def _answer(self, failure: Failure, phase: Phase, tried: int, larger: Callable[[], None] | None) -> None:
        """One decision and its carrying out; faults of the recovery itself count as further tries."""
        while True:
            self._beat()
            kind = kind_of(failure)
            decision = decide(kind, failure.role, phase, tried=tried, spent=self._spent[failure.role])
            self._spent[failure.role] += 1
            given_up = decision.action not in (Action.AGAIN, Action.RECONNECT, Action.LARGER_RANGE)
            self._log.event("fault", f"{decision.why}: {failure}", "error" if given_up else "warning")
            if given_up:
                if decision.action is not Action.FLAG:
                    self._tell(decision.why)
                raise GivenUp(decision.action, kind, f"{decision.why}: {failure}") from failure
            self.flags |= Flag.RETRIED
            if kind is Kind.RESTARTED:
                self.flags |= Flag.INSTRUMENT_RESTARTED
            try:
                if decision.action is Action.RECONNECT:
                    self._reconnect(failure.role)
                elif decision.action is Action.LARGER_RANGE and larger is not None:
                    larger()
                return
            except (InstrumentError, BadReading) as next_failure:
                failure = next_failure
                tried += 1

    def _reconnect(self, role: str) -> None:
        instrument = self._bench.roles.get(role)
        if instrument is None:
            return
        instrument.reconnect()
        self._bench.check_identity(role)
        self._bench.restore(role)
