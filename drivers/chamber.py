"""The climatic chamber. Temperatures are its air's, in degC, as its own sensor sees them."""

from drivers.instrument import Instrument

_KELVIN = 0.2  # resolution of a coarse controller


class Chamber(Instrument):
    """Moves the air around the parts."""

    def set(self, temperature_degC: float) -> float:
        """Sets the set-point; returns it as read back."""
        brought = self._talk.carry_out("set", temperature_degC=float(temperature_degC))
        return self._accepted(brought, "temperature_degC", temperature_degC, within=_KELVIN)

    def protect(self, high_degC: float) -> bool:
        """Sets the temperature above which it switches itself off; False where it has no such limit."""
        if "protect" not in self.dialect.intents:
            return False
        brought = self._talk.carry_out("protect", high_degC=float(high_degC))
        self._accepted(brought, "high_degC", high_degC, within=_KELVIN)
        return True

    def on(self) -> None:
        self._switch("output_on", to=True)

    def off(self) -> None:
        self._switch("output_off", to=False)

    def setpoint(self) -> float:
        return self._talk.carry_out("setpoint").numbers["temperature_degC"]

    def air(self) -> float:
        return self._talk.carry_out("air").numbers["temperature_degC"]
