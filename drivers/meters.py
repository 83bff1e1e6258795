"""Roles that only look: LCR meter, thermometer, ohmmeter."""

import math
from dataclasses import dataclass

from drivers.instrument import Instrument


@dataclass(frozen=True, slots=True)
class LcrReading:
    """One reading of the series equivalent.

    Attributes:
        inductance: incremental inductance at the meter's signal [H].
        resistance: series resistance at the signal's frequency [ohm].
        overload: the meter had no number for one of them.
    """

    inductance: float
    resistance: float
    overload: bool


class Lcr(Instrument):
    """Measures the incremental inductance with a small signal."""

    def set(self, frequency: float, level: float) -> tuple[float, float]:
        """Sets the signal's frequency [Hz] and level [V]; returns both as read back."""
        brought = self._talk.carry_out("set", frequency=float(frequency), level=float(level))
        return (
            self._accepted(brought, "frequency", frequency, within=0.0),
            self._accepted(brought, "level", level, within=1e-3),
        )

    def read(self) -> LcrReading:
        """One reading."""
        numbers = self._talk.carry_out("read").numbers
        inductance, resistance = numbers["inductance"], numbers["resistance"]
        overload = not (math.isfinite(inductance) and math.isfinite(resistance))
        return LcrReading(inductance, resistance, overload)


class Thermometer(Instrument):
    """The sensor on the body of each part."""

    def read(self, channel: int) -> float:
        """Temperature on a channel [degC]; infinite or NaN for a sensor that is open or missing."""
        return self._talk.carry_out("read", channel=channel).numbers["temperature_degC"]


class Ohmmeter(Instrument):
    """Four-wire winding resistance."""

    def read(self) -> float:
        """Resistance [ohm]; infinite for an open winding."""
        return self._talk.carry_out("read").numbers["resistance"]
