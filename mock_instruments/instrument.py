"""One SCPI instrument without its transport: a message in, a reply out (bytes both), status and error queue inside.

Who calls: one conversation at a time, holding the world's lock. Nothing here fails for what a client sends;
whatever is wrong with a message ends in the error queue.
"""

from collections.abc import Iterable
from typing import Protocol

from mock_instruments.scpi_errors import ScpiError
from mock_instruments.scpi_reader import Faulty, MessageReader, Unit, read_message
from mock_instruments.scpi_status import OPERATION_COMPLETE, Register, Status
from mock_instruments.scpi_tree import INFINITY, Command, Decimal, Reply, Tree, carry_out
from mock_instruments.spec import stream
from mock_instruments.world import World

_BYTE = Decimal(low=0, high=255, integer=True)
_WORD = Decimal(low=0, high=65535, integer=True)


class Cutter(Protocol):
    """Cuts a byte stream into messages, however it arrives."""

    def feed(self, data: bytes) -> Iterable[bytes]: ...


class Instrument(Protocol):
    """What a conversation and the control socket need of an instrument, SCPI or not."""

    role: str
    latency: float  # s of world time for each message
    terminator: bytes
    serial: str
    overloaded: bool

    def cutter(self) -> Cutter: ...
    def handle(self, message: bytes) -> bytes | None: ...
    def overrun(self) -> None: ...
    def fail(self) -> None: ...
    def restart(self) -> None: ...
    def output_is_on(self) -> bool: ...


class ScpiInstrument:
    """Common commands, path rule, `;` chains and the standard subsystems; a role adds its own table of commands."""

    terminator = b"\n"
    latency = 2e-3
    model = "INSTRUMENT"
    triggered = False  # understands *TRG

    def __init__(self, role: str, world: World) -> None:
        self.role = role
        self.world = world
        self.serial = f"{abs(world.spec.seed) % 10000:04d}{sum(role.encode()) % 1000:03d}"
        self.noise = stream(world.spec.seed, f"noise.{role}")
        self.overloaded = False
        self.status = Status()
        self._common = {
            "CLS": Command("CLS", do=lambda: self.status.clear()),
            "ESE": Command(
                "ESE",
                do=lambda v: setattr(self.status, "event_enable", int(v)),
                ask=lambda: str(self.status.event_enable),
                takes=(_BYTE,),
            ),
            "ESR": Command("ESR", ask=lambda: str(self.status.take_event())),
            "IDN": Command("IDN", ask=lambda: f"Mock bench,{self.model},{self.serial},1.0"),
            # Every operation is over when its message has been handled: time is the world's, not this
            # thread's.
            "OPC": Command("OPC", do=self._operation_complete, ask=lambda: "1"),
            "RST": Command("RST", do=lambda: self.reset()),
            "SRE": Command(
                "SRE",
                do=lambda v: setattr(self.status, "service_enable", int(v) & ~64),
                ask=lambda: str(self.status.service_enable),
                takes=(_BYTE,),
            ),
            "STB": Command("STB", ask=lambda: str(self.status.byte())),
            "TST": Command("TST", ask=lambda: "0"),
            "WAI": Command("WAI", do=lambda: None),
        }
        if self.triggered:
            self._common["TRG"] = Command("TRG", do=lambda: self.trigger())
        self._tree = Tree([*self._standard(), *self.commands()])
        self.reset()

    # -- for a role to fill in -----------------------------------------------------------------------------

    def commands(self) -> list[Command]:
        return []

    def reset(self) -> None:
        """``*RST``: settings to their defaults, outputs off; status, queue and enables stay (IEEE 488.2, 10.32)."""

    def trigger(self) -> None:
        raise ScpiError(-211)

    def output_is_on(self) -> bool:
        return False

    def watch(self) -> None:
        """Look at the world before each message: protections trip here."""

    # -- for whoever carries the bytes ---------------------------------------------------------------------

    def cutter(self) -> Cutter:
        return MessageReader()

    def handle(self, message: bytes) -> bytes | None:
        """Carry out one message; replies of its queries joined by ``;``, or None when it asked nothing."""
        self.watch()
        replies: list[bytes] = []
        path: tuple[str, ...] = ()
        for unit in read_message(message):
            if isinstance(unit, Faulty):
                self.status.report(unit.number, unit.detail)
                continue
            nodes = unit.nodes if unit.absolute or unit.common else path + unit.nodes
            if not unit.common:
                path = nodes[:-1]
            try:
                reply = self._run(nodes, unit)
            except ScpiError as error:
                self.status.report(error.number, error.detail)
                continue
            if reply is not None:
                replies.append(reply.encode("ascii") if isinstance(reply, str) else reply)
        return b";".join(replies) if replies else None

    def overrun(self) -> None:
        self.status.report(-363)

    def fail(self) -> None:
        """An injected hardware error, as if found by the instrument itself."""
        self.status.report(-240)

    def restart(self) -> None:
        """Power off and on: settings and status lost, power-on bit set."""
        self.reset()
        self.status = Status()

    def reading(self, value: float | None) -> float:
        """A measured value as reported: +9.9E37 when nothing can be measured or the input is overloaded."""
        return INFINITY if value is None or self.overloaded else value

    # -- inside --------------------------------------------------------------------------------------------

    def _run(self, nodes: tuple[str, ...], unit: Unit) -> Reply:
        if unit.common:
            command = self._common.get(nodes[0])
            if command is None:
                raise ScpiError(-113, f"*{nodes[0]}")
            return carry_out(command, (), unit)
        command, suffixes = self._tree.find(nodes)
        return carry_out(command, suffixes, unit)

    def _operation_complete(self) -> None:
        self.status.event |= OPERATION_COMPLETE

    def _standard(self) -> list[Command]:
        return [
            Command("SYSTem:ERRor[:NEXT]", ask=lambda: self.status.next_error()),
            Command("SYSTem:ERRor:ALL", ask=lambda: self.status.all_errors()),
            Command("SYSTem:ERRor:COUNt", ask=lambda: str(len(self.status.errors))),
            Command("SYSTem:VERSion", ask=lambda: "1999.0"),
            Command("STATus:PRESet", do=self._preset),
            *self._register("STATus:OPERation", lambda: self.status.operation),
            *self._register("STATus:QUEStionable", lambda: self.status.questionable),
        ]

    def _preset(self) -> None:
        self.status.operation.preset()
        self.status.questionable.preset()

    @staticmethod
    def _register(header: str, register: "_RegisterOf") -> list[Command]:
        def setting(node: str, field: str) -> Command:
            return Command(
                f"{header}:{node}",
                do=lambda v: setattr(register(), field, int(v) & 0x7FFF),
                ask=lambda: str(getattr(register(), field)),
                takes=(_WORD,),
            )

        return [
            Command(f"{header}[:EVENt]", ask=lambda: str(register().take_event())),
            Command(f"{header}:CONDition", ask=lambda: str(register().condition)),
            setting("ENABle", "enable"),
            setting("PTRansition", "positive"),
            setting("NTRansition", "negative"),
        ]


class _RegisterOf(Protocol):
    def __call__(self) -> Register: ...


def told(value: bool) -> str:
    """A boolean as SCPI answers it."""
    return "1" if value else "0"
