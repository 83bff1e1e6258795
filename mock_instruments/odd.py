"""The deliberately odd spelling: a chamber that is no SCPI, a digitizer and an ohmmeter with ways of their own.

Every other role of an odd bench is the plain one with CR LF behind its replies.
"""

import re
from collections.abc import Iterable

from mock_instruments.chamber import ChamberControl
from mock_instruments.instrument import Cutter, ScpiInstrument
from mock_instruments.meters import Digitizer, Ohmmeter
from mock_instruments.scpi_errors import ScpiError
from mock_instruments.scpi_tree import Choice, Command, Decimal, block, number

CRLF = b"\r\n"
CHANNELS = Choice(("VPARt", "VSHUnt"))


class LineCutter:
    """Lines ended by CR; an LF behind it is ignored."""

    def __init__(self) -> None:
        self._buffer = bytearray()

    def feed(self, data: bytes) -> Iterable[bytes]:
        self._buffer += data
        while (end := self._buffer.find(b"\r")) >= 0:
            line = bytes(self._buffer[:end])
            del self._buffer[: end + 1]
            yield line.lstrip(b"\n")
        if len(self._buffer) > 4096:
            self._buffer.clear()


class OddChamber(ScpiInstrument):
    """An ASCII line protocol, CR both ways: ``ID T S S=… H=… GO HALT E``; ``E1`` unknown, ``E2`` range, ``E3`` hardware."""

    model = "CHAMBER MOCK 1"
    terminator = b"\r"
    latency = 10e-3

    def reset(self) -> None:
        self.control = ChamberControl(self.world)
        self.last_error = 0

    def cutter(self) -> Cutter:
        return LineCutter()

    def output_is_on(self) -> bool:
        return self.control.on

    def watch(self) -> None:
        if self.control.watch():
            self.last_error = 3

    def fail(self) -> None:
        self.last_error = 3

    def restart(self) -> None:
        self.reset()

    def handle(self, message: bytes) -> bytes | None:
        self.watch()
        line = message.strip().upper()
        if not line:
            return None
        if line == b"E":
            error, self.last_error = self.last_error, 0
            return b"E%d" % error
        try:
            return self._answer(line).encode("ascii")
        except ScpiError as error:
            self.last_error = 2 if error.number in (-221, -222) else 1
            return b"E%d" % self.last_error

    def _answer(self, line: bytes) -> str:
        if line == b"ID":
            # A changed serial shows as another unit of the same make.
            return self.model if self.serial == self._first_serial else f"{self.model[:-1]}2"
        if line == b"T":
            sensed = self.control.sensed_degC() + 0.02 * self.noise.standard_normal()
            return f"T={min(999.99, self.reading(sensed)):+07.2f}"
        if line == b"S":
            return f"S={self.control.setpoint_degC:+07.2f}"
        if line in (b"GO", b"HALT"):
            self.control.switch(line == b"GO")
            return "OK"
        found = re.fullmatch(rb"([SH])=([+-]?\d+(?:\.\d*)?)", line)
        if not found:
            raise ScpiError(-113)
        value = float(found[2])
        if found[1] == b"S":
            self.control.set(value)
        elif self.control.low_degC <= value <= self.control.high_degC + 10:
            self.control.protection_degC = value
        else:
            raise ScpiError(-222)
        return "OK"

    @property
    def _first_serial(self) -> str:
        return f"{abs(self.world.spec.seed) % 10000:04d}{sum(self.role.encode()) % 1000:03d}"


class OddDigitizer(Digitizer):
    """Channels VPART and VSHUNT; offset-binary codes in 32-bit big-endian blocks, scaling by query."""

    model = "ODD DIGITIZER"
    terminator = CRLF

    def commands(self) -> list[Command]:
        most = self.world.spec.digitizer.samples
        return [
            Command(
                "TRACe:SPAN",
                do=self._set_span,
                ask=lambda c: number(self.ranges[_channel(c)]),
                takes=(CHANNELS, Decimal("V", 0, 1e3)),
                asks=(CHANNELS,),
            ),
            Command(
                "TRACe:LENGth",
                do=lambda v: self.set_samples(v),
                ask=lambda: str(self.samples),
                takes=(Decimal("", 16, most, integer=True),),
            ),
            Command(
                "TRACe:STEP",
                do=lambda v: self.set_interval(v),
                ask=lambda: number(self.interval),
                takes=(Decimal("S", 1e-10, 1.0),),
            ),
            Command(
                "TRACe:LEAD",
                do=lambda v: self.set_pretrigger(v),
                ask=lambda: str(self.pretrigger),
                takes=(Decimal("", 0, 1e6, integer=True),),
            ),
            Command("TRACe:ARM", do=self.arm),
            Command("TRACe:STOP", do=self.disarm),
            Command("TRACe:READY", ask=lambda: "YES" if self.record is not None else "NO"),
            Command("TRACe:READ", ask=self._read, asks=(CHANNELS,)),
            Command("TRACe:GAIN", ask=lambda c: number(self._step(c)), asks=(CHANNELS,)),
            Command("TRACe:OFFSet", ask=lambda c: number(-self._step(c) * self._half), asks=(CHANNELS,)),
        ]

    @property
    def _half(self) -> int:
        return 1 << (self.world.spec.digitizer.bits - 1)

    def _set_span(self, channel: str, wanted: float) -> None:
        self.set_range(_channel(channel), wanted)

    def _step(self, channel: str) -> float:
        return self.ranges[_channel(channel)] / self._half

    def _read(self, channel: str) -> bytes:
        codes, _ = self.codes(_channel(channel))
        return block((codes + self._half).astype(">i4").tobytes())


class OddOhmmeter(Ohmmeter):
    """Answers with the unit behind the number: ``1.8012E-2 OHM``."""

    model = "ODD OHMMETER"
    terminator = CRLF

    def commands(self) -> list[Command]:
        return [Command("RESistance", ask=self._read)]

    def _read(self) -> str:
        mantissa, exponent = f"{self.measure():.5E}".split("E")
        return f"{mantissa}E{int(exponent)} OHM"


def _channel(name: str) -> int:
    return 1 if name == "VPAR" else 2
