"""The relays that connect one part to one thing at a time; when one may move is decided above this room."""

from drivers.dialect import Dialect
from drivers.instrument import Instrument
from drivers.session import Session


class Multiplexer(Instrument):
    """Relays by number."""

    def __init__(self, session: Session, dialect: Dialect) -> None:
        super().__init__(session, dialect)
        self._known: tuple[int, ...] = ()  # every relay that was ever named, in the order of naming

    def open_all(self) -> None:
        self._talk.carry_out("open_all")

    def close(self, relays: tuple[int, ...] | None = None) -> None:
        """Closes relays and makes sure that they are; without any, lets go of the instrument as all roles do.

        Raises:
            Refused: a relay says that it stayed open.
        """
        if relays is None:
            super().close()
            return
        self._talk.carry_out("close", relays=self._name(relays))
        if stayed_open := set(relays) - set(self.closed(tuple(relays))):
            raise self._disagrees(f"asked to close {sorted(relays)}, {sorted(stayed_open)} stayed open")

    def closed(self, among: tuple[int, ...] | None = None) -> tuple[int, ...]:
        """Which of these relays are closed; without any, which of all that were ever named here."""
        asked = self._known if among is None else self._name(among)
        if not asked:
            return ()
        lists = self._talk.carry_out("closed", relays=asked).lists
        if "relays" in lists:
            reported = {round(number) for number in lists["relays"]}
            return tuple(relay for relay in asked if relay in reported)
        states = lists["states"]
        if len(states) != len(asked):
            raise self._disagrees(f"asked about {len(asked)} relays, it answered for {len(states)}")
        return tuple(relay for relay, state in zip(asked, states, strict=True) if state)

    def _name(self, relays: tuple[int, ...]) -> tuple[int, ...]:
        self._known = tuple(dict.fromkeys((*self._known, *relays)))
        return tuple(relays)
