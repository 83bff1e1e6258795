"""Instruments that look at the world: digitizer, LCR meter, ohmmeter, thermometer."""

from collections.abc import Callable

import numpy as np

from mock_instruments.instrument import ScpiInstrument
from mock_instruments.sampling import CodeArray, Record, Settings, capture
from mock_instruments.scpi_errors import ScpiError
from mock_instruments.scpi_tree import Channels, Choice, Command, Decimal, Quoted, block, number
from mock_instruments.world import Pulse, World

MEASURING, WAITING = 16, 32  # operation condition bits, SCPI-1999 vol. 1, 9.3
FREQUENCY_OF_AC_RESISTANCE = 1e5  # Hz at which skin and proximity have added this fraction to the winding
AC_RESISTANCE_RISE = 0.4


class Digitizer(ScpiInstrument):
    """Two channels (1 voltage, 2 shunt), triggered by the pulser. Settings snap to what the hardware has."""

    model = "DIGITIZER"

    def __init__(self, role: str, world: World) -> None:
        super().__init__(role, world)
        self.captures_overload: Callable[[], bool] = lambda: False
        world.on_trigger.append(self.on_trigger)

    def reset(self) -> None:
        spec = self.world.spec.digitizer
        self.samples, self.interval, self.pretrigger = 1000, spec.intervals[0], 100
        self.ranges = {1: spec.voltage_ranges[-1], 2: spec.shunt_ranges[-1]}
        self.form, self.length, self.swapped = "INT", 16, False
        self.source = "EXT"
        self.armed = False
        self.record: Record | None = None
        self._show()

    def commands(self) -> list[Command]:
        return [
            Command(
                "SENSe#2:VOLTage[:DC]:RANGe[:UPPer]",
                do=lambda n, v: self.set_range(n[0], v),
                ask=lambda n: number(self.ranges[n[0]]),
                takes=(Decimal("V", 0, 1e3),),
                numbered=True,
            ),
            Command(
                "SENSe#2:SWEep:POINts",
                numbered=True,
                do=lambda n, v: self.set_samples(v),
                ask=lambda n: str(self.samples),
                takes=(Decimal("", 16, self.world.spec.digitizer.samples, 1000, integer=True),),
            ),
            Command(
                "SENSe#2:SWEep:TINTerval",
                numbered=True,
                do=lambda n, v: self.set_interval(v),
                ask=lambda n: number(self.interval),
                takes=(Decimal("S", 1e-10, 1.0),),
            ),
            Command(
                "SENSe#2:SWEep:OFFSet:POINts",
                numbered=True,
                do=lambda n, v: self.set_pretrigger(-v),
                ask=lambda n: str(-self.pretrigger),
                takes=(Decimal("", -1e6, 0, 0, integer=True),),
            ),
            Command(
                "TRIGger[:SEQuence]:SOURce",
                do=lambda v: setattr(self, "source", v),
                ask=lambda: self.source,
                takes=(Choice(("EXTernal", "BUS")),),
            ),
            Command(
                "FORMat[:DATA]",
                do=self._set_format,
                ask=lambda: f"{self.form},{self.length}",
                takes=(Choice(("ASCii", "INTeger", "REAL")), Decimal("", 0, 64, integer=True)),
                optional=1,
            ),
            Command(
                "FORMat:BORDer",
                do=lambda v: setattr(self, "swapped", v == "SWAP"),
                ask=lambda: "SWAP" if self.swapped else "NORM",
                takes=(Choice(("NORMal", "SWAPped")),),
            ),
            Command("INITiate[:IMMediate][:ALL]", do=self.arm),
            Command("ABORt", do=self.disarm),
            Command("TRACe[:DATA]", ask=self._trace, asks=(Choice(("CH1", "CH2")),)),
        ]

    def on_trigger(self, pulse: Pulse) -> None:
        if not self.armed or self.source != "EXT":
            return
        settings = Settings(self.samples, self.interval, self.pretrigger, self.ranges[1], self.ranges[2])
        spec = self.world.spec
        self.record = capture(
            pulse,
            settings,
            spec.digitizer,
            spec.trigger_delay,
            self.noise,
            overloaded=self.captures_overload(),
        )
        self.armed = False
        self._show()

    def set_range(self, channel: int, wanted: float) -> None:
        spec = self.world.spec.digitizer
        there = spec.voltage_ranges if channel == 1 else spec.shunt_ranges
        fitting = [each for each in there if each >= wanted * (1 - 1e-9)]
        if not fitting:
            raise ScpiError(-222, f"{wanted:g}")
        self.ranges[channel] = fitting[0]
        self.disarm()

    def set_samples(self, wanted: float) -> None:
        self.samples = int(wanted)
        self.disarm()

    def set_interval(self, wanted: float) -> None:
        self.interval = min(self.world.spec.digitizer.intervals, key=lambda each: abs(np.log(each / wanted)))
        self.disarm()

    def set_pretrigger(self, wanted: float) -> None:
        self.pretrigger = int(wanted)
        self.disarm()

    def arm(self) -> None:
        if self.armed:
            raise ScpiError(-213)
        if self.pretrigger >= self.samples:
            raise ScpiError(-221, "trigger outside the record")
        self.armed, self.record = True, None
        self._show()

    def disarm(self) -> None:
        self.armed = False
        self._show()

    def codes(self, channel: int) -> tuple[CodeArray, Record]:
        """Right-justified codes of a channel and the record they are from. -230 while there is none."""
        if self.record is None:
            raise ScpiError(-230)
        return (self.record.voltage if channel == 1 else self.record.shunt), self.record

    def _show(self) -> None:
        self.status.operation.set_condition(WAITING if self.armed else 0)

    def _set_format(self, form: str, length: float | None = None) -> None:
        allowed = {"ASC": (0,), "INT": (16, 32), "REAL": (32, 64)}[form]
        chosen = allowed[0] if length is None else int(length)
        if form != "ASC" and chosen not in allowed:
            raise ScpiError(-224, f"{form},{chosen}")
        self.form, self.length = form, chosen

    def _trace(self, name: str) -> str | bytes:
        codes, record = self.codes(int(name[2:]))
        full_scale = record.settings.voltage_range if name == "CH1" else record.settings.shunt_range
        if self.form == "INT":
            data: np.ndarray = (codes << (self.length - record.bits)).astype(f"i{self.length // 8}")
        else:
            data = codes * (full_scale / (1 << (record.bits - 1)))
            if self.form == "ASC":
                return ",".join(number(each) for each in data)
            data = data.astype(f"f{self.length // 8}")
        return block(data.astype(data.dtype.newbyteorder("<" if self.swapped else ">")).tobytes())


class Lcr(ScpiInstrument):
    """LCR meter on the bias path: series inductance and resistance with its gain, its fixture and its noise."""

    model = "LCR"

    def reset(self) -> None:
        self.frequency, self.level = 1e5, 0.05
        self.function, self.formats = "FIMP", {1: "LS", 2: "RS"}
        self.last: dict[str, float] | None = None

    def commands(self) -> list[Command]:
        return [
            Command(
                "[SENSe:]FUNCtion[:ON]",
                do=self._set_function,
                ask=lambda: f'"{self.function}"',
                takes=(Quoted(),),
            ),
            Command(
                "CALCulate#2:FORMat",
                do=lambda n, v: self.formats.__setitem__(n[0], v),
                ask=lambda n: self.formats[n[0]],
                takes=(Choice(("LS", "RS")),),
                numbered=True,
            ),
            Command(
                "SOURce:FREQuency[:CW]",
                do=lambda v: setattr(self, "frequency", v),
                ask=lambda: number(self.frequency),
                takes=(Decimal("HZ", 20, 2e6, 1e5),),
            ),
            Command(
                "SOURce:VOLTage[:LEVel][:IMMediate][:AMPLitude]",
                do=lambda v: setattr(self, "level", v),
                ask=lambda: number(self.level),
                takes=(Decimal("V", 1e-3, 2, 0.05),),
            ),
            Command("READ[:FIMPedance]", ask=self._read),
            Command("FETCh[:FIMPedance]", ask=self._fetch),
            Command("INITiate[:IMMediate][:ALL]", do=self._measure),
            Command("ABORt", do=lambda: None),
        ]

    def _set_function(self, name: str) -> None:
        if name.upper() not in ("FIMP", "FIMPEDANCE"):
            raise ScpiError(-224, name)
        self.function = "FIMP"

    def _measure(self) -> None:
        self.world.advance(0.1)
        spec = self.world.spec
        seen = self.world.small_signal()
        draw = self.noise.standard_normal(2)
        if seen is None:
            self.last = {"LS": self.reading(None), "RS": self.reading(None)}
            return
        inductance, resistance = seen
        # The smaller the test signal the noisier the reading: 50 ppm at 50 mV.
        grain = 5e-5 * max(1.0, 0.05 / self.level)
        skin = 1.0 + AC_RESISTANCE_RISE * np.sqrt(self.frequency / FREQUENCY_OF_AC_RESISTANCE)
        self.last = {
            "LS": self.reading(
                (inductance * spec.inductance_gain + spec.fixture_inductance) * (1 + grain * draw[0])
            ),
            "RS": self.reading((resistance * skin + spec.fixture_resistance) * (1 + 20 * grain * draw[1])),
        }

    def _read(self) -> str:
        self._measure()
        return self._fetch()

    def _fetch(self) -> str:
        if self.last is None:
            raise ScpiError(-230)
        return ",".join(number(self.last[self.formats[n]]) for n in (1, 2))


class Ohmmeter(ScpiInstrument):
    """Four-wire ohmmeter on the resistance path."""

    model = "OHMMETER"

    def commands(self) -> list[Command]:
        return [Command("MEASure[:SCALar]:FRESistance", ask=lambda: number(self.measure()))]

    def measure(self) -> float:
        self.world.advance(0.2)
        spec = self.world.spec
        resistance = self.world.path_resistance("resistance")
        noise = 2e-6 * self.noise.standard_normal()
        if resistance is None:
            return self.reading(None)
        return self.reading(resistance * spec.ohmmeter_gain + spec.lead_resistance + noise)


class Thermometer(ScpiInstrument):
    """Body sensors, one channel a part; a channel without a part has an open sensor."""

    model = "THERMOMETER"
    latency = 20e-3

    def commands(self) -> list[Command]:
        return [Command("MEASure[:SCALar]:TEMPerature", ask=self._measure, asks=(Channels(1, 99),))]

    def _measure(self, channels: tuple[int, ...]) -> str:
        return ",".join(number(self._one(channel)) for channel in channels)

    def _one(self, channel: int) -> float:
        body = self.world.body_degC(channel)
        noise = 0.01 * self.noise.standard_normal()
        return self.reading(
            None if body is None else body + self.world.spec.body_offsets.get(channel, 0.0) + noise
        )
