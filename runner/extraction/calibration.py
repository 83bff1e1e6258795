"""What the bench says about itself, as numbers with standard uncertainties.

Every type B contribution of the house starts here: a `Constant` has a value and one standard uncertainty
(k = 1, GUM 4.3), and `Calibration` names all that act on a pulse or a bias reading. What a bench file does not
state is taken as exact, except the channel skew (``uncertainty=inf`` means "find it in the data") and a winding
resistance that nobody measured.
"""

from dataclasses import dataclass, field

COPPER_ALPHA_20 = 3.93e-3  # 1/K at 20 degC, annealed copper (IEC 60028)


@dataclass(frozen=True, slots=True)
class Constant:
    """A value and its standard uncertainty, in the same unit."""

    value: float
    uncertainty: float = 0.0


@dataclass(frozen=True, slots=True)
class Calibration:
    """Constants of the bench.

    ``nominal_shunt`` [ohm] is what the record divided shunt volts by; ``shunt`` [ohm] holds at
    ``shunt_temperature_degC`` and the shunt stands at ``ambient_degC`` (its uncertainty included); ``tempco`` [1/K];
    ``shunt_inductance`` [H]. Gains multiply the true input to give the reading. ``skew`` [s]: the voltage channel is
    later than the shunt channel; an infinite uncertainty has it estimated. ``body_offset`` [K] is what the thermometer
    reads too high. ``ohmmeter_gain``, ``lead_resistance`` [ohm], ``bias_gain``, ``meter_gain``,
    ``fixture_inductance`` [H], ``fixture_resistance`` [ohm] and ``open_capacitance`` [F] serve resistance and bias.
    """

    nominal_shunt: float = 1.0
    shunt: Constant = field(default=Constant(1.0))
    shunt_temperature_degC: float = 25.0
    ambient_degC: Constant = field(default=Constant(25.0, 2.0))
    tempco: Constant = field(default=Constant(0.0))
    shunt_inductance: Constant = field(default=Constant(0.0))
    voltage_gain: Constant = field(default=Constant(1.0))
    shunt_gain: Constant = field(default=Constant(1.0))
    skew: Constant = field(default=Constant(0.0))
    body_offset: Constant = field(default=Constant(0.0))
    ohmmeter_gain: Constant = field(default=Constant(1.0))
    lead_resistance: Constant = field(default=Constant(0.0))
    bias_gain: Constant = field(default=Constant(1.0))
    meter_gain: Constant = field(default=Constant(1.0))
    fixture_inductance: Constant = field(default=Constant(0.0))
    fixture_resistance: Constant = field(default=Constant(0.0))
    open_capacitance: Constant = field(default=Constant(0.0))

    @property
    def shunt_now(self) -> float:
        """Shunt resistance [ohm] at the bench's temperature."""
        warmer = self.ambient_degC.value - self.shunt_temperature_degC
        return self.shunt.value * (1.0 + self.tempco.value * warmer)

    @property
    def shunt_time_constant(self) -> float:
        """L/R of the shunt [s]: by how much a ramp of its voltage leads the current."""
        return self.shunt_inductance.value / self.shunt_now

    @property
    def relative_current_uncertainty(self) -> dict[str, float]:
        """Relative standard uncertainty of the pulse current's scale, by cause."""
        warmer = self.ambient_degC.value - self.shunt_temperature_degC
        return {
            "shunt": self.shunt.uncertainty / self.shunt.value,
            "shunt temperature": (
                (self.tempco.uncertainty * warmer) ** 2
                + (self.tempco.value * self.ambient_degC.uncertainty) ** 2
            )
            ** 0.5,
            "current gain": self.shunt_gain.uncertainty / self.shunt_gain.value,
        }


def copper_ratio(temperature_degC: float, reference_degC: float = 20.0) -> float:
    """R(T)/R(T_ref) of an annealed copper winding, linear law.

    Source: IEC 60028 for the coefficient at 20 degC.
    """
    return (1 + COPPER_ALPHA_20 * (temperature_degC - 20.0)) / (1 + COPPER_ALPHA_20 * (reference_degC - 20.0))


def winding_temperature_rise(
    cold: float, hot: float, *, cold_degC: float, ambient_degC: float, intercept: float = 234.5
) -> float:
    """Temperature rise [K] of a winding over the ambient, from its resistance cold and hot [ohm].

    Δt = (R2 − R1)/R1 · (k + t1) − (t2 − t1); k = 234.5 for copper. Source: the resistance method of IEC 60335-1.
    """
    return (hot - cold) / cold * (intercept + cold_degC) - (ambient_degC - cold_degC)


def winding_temperature(resistance: float, cold: float, cold_degC: float) -> float:
    """Mean winding temperature [degC] from its resistance now and at a known temperature (copper law)."""
    return (resistance / cold * (1 + COPPER_ALPHA_20 * (cold_degC - 20.0)) - 1) / COPPER_ALPHA_20 + 20.0
