"""The climatic chamber: what its controller does, and the same in plain SCPI. Its odd spelling stands in `odd`."""

from mock_instruments.instrument import ScpiInstrument, told
from mock_instruments.scpi_errors import ScpiError
from mock_instruments.scpi_tree import Boolean, Command, Decimal, number
from mock_instruments.world import World

QUESTIONABLE_TEMPERATURE = 16  # SCPI-1999 vol. 1, 9.4


class ChamberControl:
    """What a controller does, however it is spelled: set-point, protection, on and off, air sensor."""

    def __init__(self, world: World) -> None:
        self.world = world
        self.low_degC, self.high_degC = world.spec.chamber_range_degC
        self.setpoint_degC, self.on = self.world.spec.chamber_safe_degC, False
        self.protection_degC = self.high_degC + 10.0
        self.apply()

    def apply(self) -> None:
        self.world.set_chamber(on=self.on, setpoint_degC=self.setpoint_degC)

    def set(self, setpoint_degC: float) -> None:
        """Raises ScpiError: -222 outside the chamber's range, -221 above its protection."""
        if not self.low_degC <= setpoint_degC <= self.high_degC:
            raise ScpiError(-222, f"{setpoint_degC:g}")
        if setpoint_degC > self.protection_degC:
            raise ScpiError(-221, "set-point above the protection")
        self.setpoint_degC = setpoint_degC
        self.apply()

    def switch(self, on: bool) -> None:
        self.on = on
        self.apply()

    def sensed_degC(self) -> float:
        return self.world.air_degC() + self.world.spec.chamber_offset

    def watch(self) -> bool:
        """Trip when the sensor is above the protection; True if it just did."""
        if self.on and self.sensed_degC() > self.protection_degC:
            self.switch(False)
            return True
        return False


class Chamber(ScpiInstrument):
    """Climatic chamber in plain SCPI."""

    model = "CHAMBER"
    latency = 10e-3

    def reset(self) -> None:
        self.control = ChamberControl(self.world)
        self.status.questionable.set_condition(0)

    def commands(self) -> list[Command]:
        low, high = self.world.spec.chamber_range_degC
        return [
            Command(
                "[SOURce:]TEMPerature[:SPOint]",
                do=lambda v: self.control.set(v),
                ask=lambda: number(self.control.setpoint_degC),
                takes=(Decimal("CEL", low, high, 25),),
            ),
            Command(
                "[SOURce:]TEMPerature:PROTection[:HIGH][:LEVel]",
                do=lambda v: setattr(self.control, "protection_degC", v),
                ask=lambda: number(self.control.protection_degC),
                takes=(Decimal("CEL", low, high + 10),),
            ),
            Command(
                "OUTPut[:STATe]",
                do=lambda v: self.control.switch(v),
                ask=lambda: told(self.control.on),
                takes=(Boolean(),),
            ),
            Command("MEASure[:SCALar]:TEMPerature", ask=self._measure),
        ]

    def output_is_on(self) -> bool:
        return self.control.on

    def watch(self) -> None:
        if self.control.watch():
            self.status.questionable.set_condition(QUESTIONABLE_TEMPERATURE)

    def _measure(self) -> str:
        return number(self.reading(self.control.sensed_degC() + 0.02 * self.noise.standard_normal()))
