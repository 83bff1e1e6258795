"""Roles that put out something: supply, pulser, bias source."""

from drivers.instrument import Instrument

# How far a source's own resolution may move a set-point, beyond 1 %: a coarse 10-bit source of 30 V or 20 A.
_VOLT, _AMPERE = 0.03, 0.02
# And the width of a pulse: a 100 MHz time base.
_SECOND = 10e-9


class Supply(Instrument):
    """The rail that feeds the capacitor bank."""

    def set(self, voltage: float, current: float) -> tuple[float, float]:
        """Sets voltage [V] and current limit [A]; returns both as read back."""
        brought = self._talk.carry_out("set", voltage=float(voltage), current=float(current))
        return (
            self._accepted(brought, "voltage", voltage, within=_VOLT),
            self._accepted(brought, "current", current, within=_AMPERE),
        )

    def protect(self, voltage: float, current: float) -> bool:
        """Sets over-voltage [V] and over-current [A] protection; False where the instrument has none."""
        if "protect" not in self.dialect.intents:
            return False
        brought = self._talk.carry_out("protect", voltage=float(voltage), current=float(current))
        self._accepted(brought, "voltage", voltage, within=_VOLT)
        self._accepted(brought, "current", current, within=_AMPERE)
        return True

    def on(self) -> None:
        self._switch("output_on", to=True)

    def off(self) -> None:
        self._switch("output_off", to=False)

    def measure(self) -> tuple[float, float]:
        """Voltage [V] and current [A] at the output; infinite or NaN where the instrument has no number."""
        numbers = self._talk.carry_out("measure").numbers
        return numbers["voltage"], numbers["current"]


class Pulser(Instrument):
    """Closes the switch for one pulse at a time; its trigger also starts the digitizer."""

    def set(self, width: float, polarity: int = +1) -> float:
        """Sets the pulse width [s] and the polarity, +1 or -1; returns the width as read back."""
        if polarity not in (+1, -1):
            raise ValueError(f"polarity is +1 or -1, got {polarity!r}")
        word = "normal" if polarity > 0 else "inverted"
        if polarity < 0 and "polarity" not in self.dialect.words:
            raise self._disagrees("asked for an inverted pulse, which its dialect cannot spell")
        brought = self._talk.carry_out("set", width=float(width), polarity=word)
        if brought.texts.get("polarity", word) != word:
            raise self._disagrees(
                f"asked for a pulse of {word} polarity, it says {brought.texts['polarity']}"
            )
        return self._accepted(brought, "width", width, within=_SECOND)

    def on(self) -> None:
        self._switch("output_on", to=True)

    def off(self) -> None:
        self._switch("output_off", to=False)

    def protect(self, current: float) -> bool:
        """Sets the current [A] at which the fixture itself ends a pulse; False where it cannot."""
        if "protect" not in self.dialect.intents:
            return False
        brought = self._talk.carry_out("protect", current=float(current))
        self._accepted(brought, "current", current, within=_AMPERE)
        return True

    def fire(self) -> None:
        """One pulse; returns when it is over."""
        self._talk.carry_out("fire")


class BiasSource(Instrument):
    """The direct current through the part, for the bias method."""

    def set(self, current: float) -> float:
        """Sets the current [A]; returns it as read back."""
        brought = self._talk.carry_out("set", current=float(current))
        return self._accepted(brought, "current", current, within=_AMPERE)

    def protect(self, current: float, voltage: float) -> bool:
        """Sets over-current [A] and over-voltage [V] protection; False where the instrument has none."""
        if "protect" not in self.dialect.intents:
            return False
        brought = self._talk.carry_out("protect", current=float(current), voltage=float(voltage))
        self._accepted(brought, "current", current, within=_AMPERE)
        self._accepted(brought, "voltage", voltage, within=_VOLT)
        return True

    def on(self) -> None:
        self._switch("output_on", to=True)

    def off(self) -> None:
        self._switch("output_off", to=False)

    def measure(self) -> tuple[float, float]:
        """Current [A] and voltage [V] at the output; infinite or NaN where the instrument has no number."""
        numbers = self._talk.carry_out("measure").numbers
        return numbers["current"], numbers["voltage"]
