"""All the instruments of one world, the conversations with them, and what the control socket may ask. No sockets here.

A `Conversation` is one client with one instrument: bytes in, `Answer`s out. Instruments and world are
shared by all conversations; `World.lock` is held around each message, so that a message is one event in the
world's time.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from mock_instruments.chamber import Chamber
from mock_instruments.faults import KINDS, PART_KINDS, REPLY_KINDS, Fault, Stuck, garbled
from mock_instruments.instrument import Instrument
from mock_instruments.meters import Digitizer, Lcr, Ohmmeter, Thermometer
from mock_instruments.odd import CRLF, OddChamber, OddDigitizer, OddOhmmeter
from mock_instruments.sources import BiasSource, Multiplexer, Pulser, Supply
from mock_instruments.spec import WorldSpec, stream
from mock_instruments.world import Part, World

ROLES = (
    "supply",
    "pulser",
    "digitizer",
    "lcr",
    "bias_source",
    "chamber",
    "thermometer",
    "ohmmeter",
    "multiplexer",
)
_PLAIN = {
    "supply": Supply,
    "pulser": Pulser,
    "digitizer": Digitizer,
    "lcr": Lcr,
    "bias_source": BiasSource,
    "chamber": Chamber,
    "thermometer": Thermometer,
    "ohmmeter": Ohmmeter,
    "multiplexer": Multiplexer,
}
_ODD = {"chamber": OddChamber, "digitizer": OddDigitizer, "ohmmeter": OddOhmmeter}


@dataclass(frozen=True, slots=True)
class Answer:
    """Bytes for the client after ``wait`` [s] of wall time; ``close`` ends the connection."""

    data: bytes = b""
    close: bool = False
    wait: float = 0.0


class Bench:
    """World, instruments by role and the faults that are planned."""

    def __init__(self, spec: WorldSpec) -> None:
        self.world = World(spec)
        self.instruments: dict[str, Instrument] = {}
        for role in ROLES:
            kind = _ODD.get(role, _PLAIN[role]) if spec.spelling == "odd" else _PLAIN[role]
            instrument = kind(role, self.world)
            if spec.spelling == "odd" and role not in _ODD:
                instrument.terminator = CRLF
            self.instruments[role] = instrument
        self.faults: dict[str, Fault] = {}
        self.generation = dict.fromkeys(ROLES, 0)  # a restart ends the conversations of an older generation
        self.stuck = {role: Stuck() for role in ROLES}
        self._part_faults: dict[int, Fault] = {}
        self._noise = stream(spec.seed, "faults")
        self.world.used.append(self._part_used)
        digitizer = self.instruments["digitizer"]
        assert isinstance(digitizer, Digitizer)
        digitizer.captures_overload = self._capture_overloads

    def conversation(self, role: str) -> "Conversation":
        return Conversation(self, role)

    def control(self, request: Mapping[str, Any]) -> dict[str, Any]:
        """Answer one request of the control socket; ``{"error": text}`` when it makes no sense."""
        with self.world.lock:
            try:
                return self._control(request)
            except (KeyError, TypeError, ValueError) as error:
                return {"error": f"{type(error).__name__}: {error}"}

    def _control(self, request: Mapping[str, Any]) -> dict[str, Any]:
        do = request["do"]
        if do == "now":
            return {"now": self.world.now}
        if do == "advance":
            return {"now": self.world.advance(float(request["seconds"]))}
        if do == "ledger":
            return self.ledger()
        if do == "fault":
            self._plan_fault(request)
            return {"now": self.world.now}
        if do == "quit":
            return {"now": self.world.now, "quit": True}
        raise ValueError(f"there is no {do!r}; there are now, advance, ledger, fault, quit")

    def ledger(self) -> dict[str, Any]:
        """What happened so far and what is on now."""
        on = self.world.switched_on() | {"pulser": self.instruments["pulser"].output_is_on()}
        return {"now": self.world.now, **self.world.ledger.as_mapping(), "on": on}

    # -- faults --------------------------------------------------------------------------------------------

    def _plan_fault(self, request: Mapping[str, Any]) -> None:
        role, kind = str(request["role"]), str(request["kind"])
        fault = Fault(
            kind,
            after=int(request.get("after", 0)),
            count=int(request.get("count", 1)),
            seconds=float(request.get("seconds", 0.3)),
            channel=int(request.get("channel", 1)),
        )
        if role == "part":
            self._plan_part_fault(fault)
        elif role not in self.instruments:
            raise ValueError(f"there is no role {role!r}; there are {', '.join((*ROLES, 'part'))}")
        elif kind == "none":
            self.faults.pop(role, None)
            self.instruments[role].overloaded = False
        elif kind not in KINDS:
            raise ValueError(f"there is no fault {kind!r}; there are {', '.join((*KINDS, 'none'))}")
        else:
            self.faults[role] = fault

    def _plan_part_fault(self, fault: Fault) -> None:
        part = self.world.parts.get(fault.channel)
        if part is None:
            raise ValueError(f"there is no part on channel {fault.channel}")
        if fault.kind == "none":
            part.fault = ""
            self._part_faults.pop(fault.channel, None)
        elif fault.kind not in PART_KINDS:
            raise ValueError(f"a part can fail as {' or '.join(PART_KINDS)}, not {fault.kind!r}")
        elif fault.after:
            self._part_faults[fault.channel] = fault
        else:
            part.fault = fault.kind

    def _part_used(self, part: Part) -> None:
        """A planned part fault sets in for good with the use after ``after`` others: parts do not heal."""
        fault = self._part_faults.get(part.channel)
        if fault is not None and fault.strikes():
            part.fault = fault.kind
            del self._part_faults[part.channel]

    def _capture_overloads(self) -> bool:
        """A digitizer is overloaded while it captures, not while it is asked: its overloads count captures."""
        fault = self.faults.get("digitizer")
        return fault is not None and fault.kind == "overload" and fault.strikes()

    def garbled(self, reply: bytes) -> bytes:
        return garbled(reply, self._noise)


class Conversation:
    """One client with one instrument; bytes may arrive in any pieces."""

    def __init__(self, bench: Bench, role: str) -> None:
        self.bench = bench
        self.role = role
        self.instrument = bench.instruments[role]
        self.generation = bench.generation[role]
        self._cutter = self.instrument.cutter()
        self._overruns = 0

    def feed(self, data: bytes) -> Iterator[Answer]:
        """Answers to the messages that ``data`` completes, in order; stop at one that closes."""
        for message in self._cutter.feed(data):
            with self.bench.world.lock:
                answer = self._message(message)
            if answer is not None:
                yield answer
                if answer.close:
                    return
        overruns = getattr(self._cutter, "overruns", 0)
        if overruns != self._overruns:
            self._overruns = overruns
            self.instrument.overrun()

    def _message(self, message: bytes) -> Answer | None:
        bench, instrument, role = self.bench, self.instrument, self.role
        if self.generation != bench.generation[role]:
            return Answer(close=True)
        fault = bench.faults.get(role)
        if fault is not None and fault.spent:
            del bench.faults[role]
            fault = None
        if fault is not None and fault.kind not in REPLY_KINDS and fault.strikes():
            spoiled = self._before(fault)
            if spoiled is not None:
                return spoiled if spoiled.close else None
        bench.world.advance(instrument.latency)
        if fault is None or fault.kind not in REPLY_KINDS or (fault.kind, role) == ("overload", "digitizer"):
            reply = instrument.handle(message)
            return None if reply is None else self._whole(message, reply)
        return self._spoil(fault, message)

    def _before(self, fault: Fault) -> Answer | None:
        """A fault that strikes before the message is looked at; an answer when it goes no further."""
        if fault.kind == "deaf":
            return Answer()
        if fault.kind == "close":
            return Answer(close=True)
        if fault.kind == "restart":
            self.instrument.restart()
            self.bench.generation[self.role] += 1
            return Answer(close=True)
        if fault.kind == "identity":
            self.instrument.serial = f"{int(self.instrument.serial) + 1:07d}"
        else:
            self.instrument.fail()
        return None

    def _spoil(self, fault: Fault, message: bytes) -> Answer | None:
        """A message whose reply a fault may spoil."""
        kind, instrument = fault.kind, self.instrument
        stuck = self.bench.stuck[self.role]
        if kind == "stuck":
            held = stuck.replies.get(message)
            if held is not None and stuck.measures(message) and fault.strikes():
                return Answer(held + instrument.terminator)
            reply = instrument.handle(message)
            return None if reply is None else self._whole(message, reply)
        asks = b"?" in message or kind == "overload" or instrument.terminator == b"\r"
        strikes = asks and fault.strikes()
        instrument.overloaded = strikes and kind == "overload"
        reply = instrument.handle(message)
        instrument.overloaded = False
        if reply is None:
            return None
        if not strikes or kind == "overload":
            return self._whole(message, reply)
        if kind == "silent":
            return None
        if kind == "slow":
            self.bench.world.advance(fault.seconds)
            return Answer(reply + instrument.terminator, wait=fault.seconds)
        if kind == "half":
            return Answer(reply[: max(1, len(reply) // 2)])
        return Answer(self.bench.garbled(reply) + instrument.terminator)

    def _whole(self, message: bytes, reply: bytes) -> Answer:
        stuck = self.bench.stuck[self.role]
        if stuck.measures(message):
            stuck.remember(message, reply)
        return Answer(reply + self.instrument.terminator)
