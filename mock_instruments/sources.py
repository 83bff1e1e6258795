"""Instruments that act on the world: supply, pulser, bias source, multiplexer."""

import math

from mock_instruments.instrument import ScpiInstrument, told
from mock_instruments.scpi_errors import ScpiError
from mock_instruments.scpi_tree import Boolean, Channels, Choice, Command, Decimal, number

QUESTIONABLE_VOLTAGE, QUESTIONABLE_CURRENT = 1, 2  # SCPI-1999 vol. 1, 9.4


class Supply(ScpiInstrument):
    """Feeds the bank through its current limit; cannot sink, so a charged bank stays charged until bled."""

    model = "SUPPLY"

    def reset(self) -> None:
        spec = self.world.spec
        self.voltage, self.current, self.on = 0.0, 0.0, False
        self.voltage_protection, self.current_protection = (
            1.1 * spec.supply_voltage,
            1.1 * spec.supply_current,
        )
        self.status.questionable.set_condition(0)
        self._apply()

    def commands(self) -> list[Command]:
        most_volts, most_amps = self.world.spec.supply_voltage, self.world.spec.supply_current
        return [
            Command(
                "[SOURce:]VOLTage[:LEVel][:IMMediate][:AMPLitude]",
                do=self._set_voltage,
                ask=lambda: number(self.voltage),
                takes=(Decimal("V", 0, most_volts, 0),),
            ),
            Command(
                "[SOURce:]CURRent[:LEVel][:IMMediate][:AMPLitude]",
                do=self._set_current,
                ask=lambda: number(self.current),
                takes=(Decimal("A", 0, most_amps, 0),),
            ),
            Command(
                "[SOURce:]VOLTage:PROTection[:LEVel]",
                do=self._protect_voltage,
                ask=lambda: number(self.voltage_protection),
                takes=(Decimal("V", 0.1, 1.1 * most_volts),),
            ),
            Command(
                "[SOURce:]CURRent:PROTection[:LEVel]",
                do=self._protect_current,
                ask=lambda: number(self.current_protection),
                takes=(Decimal("A", 0.01, 1.1 * most_amps),),
            ),
            Command(
                "[SOURce:]VOLTage:PROTection:TRIPped", ask=lambda: told(self._tripped(QUESTIONABLE_VOLTAGE))
            ),
            Command(
                "[SOURce:]CURRent:PROTection:TRIPped", ask=lambda: told(self._tripped(QUESTIONABLE_CURRENT))
            ),
            Command("[SOURce:]VOLTage:PROTection:CLEar", do=self._clear),
            Command("[SOURce:]CURRent:PROTection:CLEar", do=self._clear),
            Command("OUTPut[:STATe]", do=self._output, ask=lambda: told(self.on), takes=(Boolean(),)),
            Command("MEASure[:SCALar]:VOLTage[:DC]", ask=self._measure_voltage),
            Command("MEASure[:SCALar]:CURRent[:DC]", ask=self._measure_current),
        ]

    def output_is_on(self) -> bool:
        return self.on

    def watch(self) -> None:
        if self.on and self.world.bank_voltage > self.voltage_protection:
            self._trip(QUESTIONABLE_VOLTAGE)
        if self.on and self.world.supply_current > self.current_protection:
            self._trip(QUESTIONABLE_CURRENT)

    def _set_voltage(self, value: float) -> None:
        if value > self.voltage_protection:
            raise ScpiError(-221, "level above its protection")
        self.voltage = value
        self._apply()

    def _set_current(self, value: float) -> None:
        if value > self.current_protection:
            raise ScpiError(-221, "level above its protection")
        self.current = value
        self._apply()

    def _protect_voltage(self, value: float) -> None:
        self.voltage_protection = value
        self.watch()

    def _protect_current(self, value: float) -> None:
        self.current_protection = value
        self.watch()

    def _output(self, on: bool) -> None:
        if on and self.status.questionable.condition:
            raise ScpiError(-221, "protection has tripped")
        self.on = on
        self._apply()

    def _trip(self, bit: int) -> None:
        self.on = False
        self.status.questionable.set_condition(self.status.questionable.condition | bit)
        self._apply()

    def _tripped(self, bit: int) -> bool:
        return bool(self.status.questionable.condition & bit)

    def _clear(self) -> None:
        self.status.questionable.set_condition(0)

    def _apply(self) -> None:
        self.world.set_supply(on=self.on, voltage=self.voltage, limit=self.current)

    def _measure_voltage(self) -> str:
        return number(self.reading(self.world.bank_voltage + 5e-4 * self.noise.standard_normal()))

    def _measure_current(self) -> str:
        return number(self.reading(self.world.supply_current + 2e-4 * self.noise.standard_normal()))


class Pulser(ScpiInstrument):
    """Drives the switch; its trigger output triggers the digitizer. A comparator on the shunt may cut the gate early."""

    model = "PULSER"
    triggered = True

    def reset(self) -> None:
        self.width, self.count, self.period, self.inverted = 1e-6, 1, 1e-2, False
        self.on, self.continuous, self.initiated, self.source = False, False, False, "IMM"
        self.trip_current = math.inf
        self.status.questionable.set_condition(0)

    def commands(self) -> list[Command]:
        longest = self.world.spec.longest_width
        return [
            Command(
                "[SOURce:]FUNCtion[:SHAPe]",
                do=lambda _: None,
                ask=lambda: "PULS",
                takes=(Choice(("PULSe",)),),
            ),
            Command(
                "[SOURce:]PULSe:WIDTh",
                do=lambda v: setattr(self, "width", v),
                ask=lambda: number(self.width),
                takes=(Decimal("S", 50e-9, longest, 1e-6),),
            ),
            Command(
                "[SOURce:]PULSe:PERiod",
                do=lambda v: setattr(self, "period", v),
                ask=lambda: number(self.period),
                takes=(Decimal("S", 1e-4, 10.0, 1e-2),),
            ),
            Command(
                "[SOURce:]PULSe:COUNt",
                do=lambda v: setattr(self, "count", int(v)),
                ask=lambda: str(self.count),
                takes=(Decimal("", 1, 100, 1, integer=True),),
            ),
            Command(
                "[SOURce:]PULSe:POLarity",
                do=lambda v: setattr(self, "inverted", v == "INV"),
                ask=lambda: "INV" if self.inverted else "NORM",
                takes=(Choice(("NORMal", "INVerted")),),
            ),
            Command(
                "[SOURce:]CURRent:PROTection[:LEVel]",
                do=lambda v: setattr(self, "trip_current", v),
                ask=lambda: number(self.trip_current),
                takes=(Decimal("A", 0.1, 1e4),),
            ),
            Command(
                "[SOURce:]CURRent:PROTection:TRIPped",
                ask=lambda: told(bool(self.status.questionable.condition)),
            ),
            Command(
                "[SOURce:]CURRent:PROTection:CLEar", do=lambda: self.status.questionable.set_condition(0)
            ),
            Command(
                "TRIGger[:SEQuence]:SOURce",
                do=lambda v: setattr(self, "source", v),
                ask=lambda: self.source,
                takes=(Choice(("BUS", "IMMediate", "EXTernal")),),
            ),
            Command(
                "INITiate:CONTinuous",
                do=lambda v: setattr(self, "continuous", v),
                ask=lambda: told(self.continuous),
                takes=(Boolean(),),
            ),
            Command("INITiate[:IMMediate][:ALL]", do=self._initiate),
            Command("ABORt", do=lambda: setattr(self, "initiated", False)),
            Command(
                "OUTPut[:STATe]",
                do=lambda v: setattr(self, "on", v),
                ask=lambda: told(self.on),
                takes=(Boolean(),),
            ),
        ]

    def output_is_on(self) -> bool:
        return self.on

    def trigger(self) -> None:
        if not (self.on and self.source == "BUS" and (self.continuous or self.initiated)):
            raise ScpiError(-211)
        self.initiated = False
        for nth in range(self.count):
            if nth:
                self.world.advance(self.period)
            pulse = self.world.fire(
                self.width, polarity=-1 if self.inverted else 1, trip_current=self.trip_current
            )
            if pulse.shot is not None and pulse.shot.tripped:
                self.status.questionable.set_condition(QUESTIONABLE_CURRENT)

    def _initiate(self) -> None:
        if self.continuous or self.initiated:
            raise ScpiError(-213)
        self.initiated = True


class BiasSource(ScpiInstrument):
    """Current source on the bias path, with sensed voltage and a voltage limit."""

    model = "BIAS"

    def reset(self) -> None:
        self.current, self.on = 0.0, False
        self.current_protection, self.voltage_limit = self.world.spec.bias_maximum, 10.0
        self._apply()

    def commands(self) -> list[Command]:
        most = self.world.spec.bias_maximum
        return [
            Command(
                "[SOURce:]CURRent[:LEVel][:IMMediate][:AMPLitude]",
                do=self._set_current,
                ask=lambda: number(self.current),
                takes=(Decimal("A", -most, most, 0),),
            ),
            Command(
                "[SOURce:]CURRent:PROTection[:LEVel]",
                do=self._protect,
                ask=lambda: number(self.current_protection),
                takes=(Decimal("A", 0.01, most),),
            ),
            Command(
                "[SOURce:]VOLTage:PROTection[:LEVel]",
                do=self._limit_voltage,
                ask=lambda: number(self.voltage_limit),
                takes=(Decimal("V", 0.01, 30.0),),
            ),
            Command("OUTPut[:STATe]", do=self._output, ask=lambda: told(self.on), takes=(Boolean(),)),
            Command("MEASure[:SCALar]:CURRent[:DC]", ask=self._measure_current),
            Command("MEASure[:SCALar]:VOLTage[:DC]", ask=self._measure_voltage),
        ]

    def output_is_on(self) -> bool:
        return self.on

    def _set_current(self, value: float) -> None:
        if abs(value) > self.current_protection:
            raise ScpiError(-221, "level above its protection")
        self.current = value
        self._apply()

    def _protect(self, value: float) -> None:
        self.current_protection = value
        if abs(self.current) > value:
            self.on = False
            self._apply()

    def _limit_voltage(self, value: float) -> None:
        self.voltage_limit = value
        self._apply()

    def _output(self, on: bool) -> None:
        self.on = on
        self._apply()

    def _apply(self) -> None:
        # The source trusts its own ammeter: what flows is the set value over that meter's gain.
        self.world.set_bias(
            on=self.on, current=self.current / self.world.spec.bias_gain, voltage_limit=self.voltage_limit
        )

    def _measure_current(self) -> str:
        true = self.world.bias_current * self.world.spec.bias_gain
        return number(self.reading(true + 5e-5 * self.noise.standard_normal()))

    def _measure_voltage(self) -> str:
        return number(self.reading(self.world.bias_voltage + 1e-5 * self.noise.standard_normal()))


class Multiplexer(ScpiInstrument):
    """Relays; the world connects what is closed."""

    model = "RELAYS"
    latency = 20e-3

    def reset(self) -> None:
        self.world.move_relays(())

    def commands(self) -> list[Command]:
        return [
            Command(
                "ROUTe:CLOSe", do=self._close, ask=self._is_closed, takes=(Channels(),), asks=(Channels(),)
            ),
            Command("ROUTe:CLOSe:STATe", ask=lambda: f"(@{','.join(map(str, sorted(self.world.closed)))})"),
            Command("ROUTe:OPEN", do=self._open, ask=self._is_open, takes=(Channels(),), asks=(Channels(),)),
            Command("ROUTe:OPEN:ALL", do=lambda: self.world.move_relays(())),
        ]

    def _close(self, relays: tuple[int, ...]) -> None:
        self.world.move_relays(self.world.closed | frozenset(self._known(relays)))

    def _open(self, relays: tuple[int, ...]) -> None:
        self.world.move_relays(self.world.closed - frozenset(self._known(relays)))

    def _is_closed(self, relays: tuple[int, ...]) -> str:
        return ",".join(told(relay in self.world.closed) for relay in self._known(relays))

    def _is_open(self, relays: tuple[int, ...]) -> str:
        return ",".join(told(relay not in self.world.closed) for relay in self._known(relays))

    def _known(self, relays: tuple[int, ...]) -> tuple[int, ...]:
        wired = self.world.spec.relays
        there = {*range(101, 121), *range(201, 211), *wired.parts.values(), *wired.paths.values()}
        for relay in relays:
            if relay not in there:
                raise ScpiError(-222, f"no relay {relay}")
        return relays
