"""What every instrument offers, whatever its role: who it is, what it complains of, how to make it safe."""

import contextlib
from dataclasses import dataclass

from drivers.conversation import Conversation
from drivers.dialect import Dialect
from drivers.errors import InstrumentError, Refused, Restarted
from drivers.needs import ROLES
from drivers.replies import Values
from drivers.session import Session


@dataclass(frozen=True, slots=True)
class Identity:
    """Who an instrument says it is. `text` is the whole reply; a field that it does not name is empty."""

    vendor: str
    model: str
    serial: str
    firmware: str
    text: str


class Instrument:
    """One instrument of the bench, seen through its dialect.

    Every method may raise `NoReply`, `Garbled`, `Disconnected`, `Refused` or `Restarted`; after any of them
    the object may be used again, and gets into step with the instrument by itself.
    """

    def __init__(self, session: Session, dialect: Dialect) -> None:
        self.role = dialect.role
        self.resource = session.resource
        self.dialect = dialect
        self._talk = Conversation(session, dialect)

    def identify(self) -> Identity:
        """Who it is: the four fields of `*IDN?` (IEEE 488.2, 10.14), or one line if it has none."""
        text = self._talk.identity()
        fields = [field.strip() for field in text.split(",")]
        if len(fields) < 4:
            return Identity(vendor="", model=text, serial="", firmware="", text=text)
        return Identity(fields[0], fields[1], fields[2], ",".join(fields[3:]), text)

    def errors(self) -> tuple[str, ...]:
        """Empties the error queue; oldest first."""
        return self._talk.errors()

    def restarted(self) -> bool:
        """Whether it was switched on anew since it was first talked to (and that was not said before).

        False where the dialect has no power-on bit. In joined messages the bit is also watched, see
        `Restarted`.
        """
        return self._talk.has_restarted()

    def reset(self) -> None:
        """Back to the settings it has by default, with an empty error queue."""
        self._talk.say(self.dialect.reset)

    def safe(self) -> None:
        """Makes it harmless, whatever its state and whatever went wrong before.

        Tries the whole, then message by message, so that one refused message does not keep the others from
        being sent. One that does not answer any more, or only with rubbish, is told all the same.

        Raises:
            InstrumentError: something of it may still be on.
        """
        try:
            self._make_safe()
        except InstrumentError:
            failure: InstrumentError | None = None
            for message in self.dialect.safe:
                try:
                    self._talk.say((message,))
                except Restarted:
                    pass  # a restarted instrument took this message as well
                except Refused as why:
                    failure = why
                except InstrumentError:
                    self._talk.tell(self.dialect.safe)
                    raise
            if failure is not None:
                raise failure from None

    def reconnect(self) -> None:
        """Drops the connection and makes a new one, with a device clear where the interface has one."""
        self._talk.reopen()

    def close(self) -> None:
        """Lets go of the instrument, as it is."""
        self._talk.session.close()

    def capabilities(self) -> tuple[str, ...]:
        """What its dialect can do beyond what the role needs, in words."""
        dialect, needs = self.dialect, ROLES[self.dialect.role]
        found = {
            "identity": dialect.identity is not None,
            "error queue": dialect.errors.ask is not None,
            "restart detection": dialect.power_on is not None,
            "reset": bool(dialect.reset),
            "one round trip for several messages": dialect.join is not None,
        }
        for name, messages in dialect.intents.items():
            found[name.replace("_", " ")] = needs[name].optional
            read_back = {value for message in messages for value in message.brings} & set(
                needs[name].may_give
            )
            found[f"read-back of {name.replace('_', ' ')}"] = bool(read_back)
        return tuple(name for name, is_there in found.items() if is_there)

    # ---- for the roles

    def _make_safe(self) -> None:
        with contextlib.suppress(Restarted):  # it was off, and has now heard the safe messages as well
            self._talk.say(self.dialect.safe)

    def _switch(self, intent: str, *, to: bool) -> None:
        brought = self._talk.carry_out(intent)
        if brought.flags.get("active", to) is not to:
            state = "on" if to else "off"
            raise self._disagrees(f"asked to switch {state}, it says that it is {'off' if to else 'on'}")

    def _accepted(self, brought: Values, name: str, asked: float, *, within: float) -> float:
        """The read-back of a setting, or what was asked for where nothing is read back.

        Args:
            within: how far an instrument's own resolution may move the setting, beyond 1 % of it.

        Raises:
            Refused: it says that it is set to something else, or to nothing.
        """
        got = brought.numbers.get(name, asked)
        if not abs(got - asked) <= max(within, 0.01 * abs(asked)):
            raise self._disagrees(f"asked to set {name} to {asked:.6g}, it says that it is set to {got:.6g}")
        return got

    def _disagrees(self, what: str) -> Refused:
        return Refused(
            self.role, self.resource, f"{what}; check its limits and that it is under remote control", (what,)
        )
