"""A simulated bench in this process, without sockets: the test double of `VisaSite`.

The same world, messages and faults as over TCP, and sessions that fail like the real ones (no reply, half a reply, closed
connection), only that nobody waits: a reply that does not come is known at once. Campaigns of hundreds of runs use it.
"""

from collections.abc import Callable, Mapping
from functools import cache
from pathlib import Path
from typing import Any

from drivers import Dialect, Disconnected, Garbled, InstrumentError, NoReply, connect
from mock_instruments import Bench as MockBench
from mock_instruments import WorldSpec
from runner.plan import LoadedPlan, load_model, simulation_spec
from runner.sweep.clock import Clock
from runner.sweep.heart import Heart, NoHeart
from runner.sweep.opening import roles_needed
from runner.sweep.safe_state import SafeRule

_TERMINATORS = {"LF": b"\n", "CR": b"\r", "CRLF": b"\r\n"}


class MemorySession:
    """One client of one instrument; see `drivers.Session`."""

    def __init__(self, bench: MockBench, role: str, dialect: Dialect, timeout: float) -> None:
        self.role = role
        self.resource = f"MEMORY::{role}"
        self.timeout = timeout
        self._bench = bench
        self._end = _TERMINATORS[dialect.terminator.reply]
        self._pending = b""
        self.reopen()

    def write(self, message: bytes) -> None:
        self._refuse_if_closed()
        for answer in self._conversation.feed(message):
            # An answer that comes too late is not there when it is looked for; reopening drops it.
            if answer.wait < self.timeout:
                self._pending += answer.data
            if answer.close:
                self._is_closed = True
                return

    def read_line(self) -> bytes:
        if self._end not in self._pending:
            self._fail()
        line, _, self._pending = self._pending.partition(self._end)
        return line

    def read_exactly(self, count: int) -> bytes:
        if len(self._pending) < count:
            self._fail()
        data, self._pending = self._pending[:count], self._pending[count:]
        return data

    def reopen(self) -> None:
        self._conversation = self._bench.conversation(self.role)
        self._pending = b""
        self._is_closed = False

    def close(self) -> None:
        self._is_closed = True

    def _refuse_if_closed(self) -> None:
        if self._is_closed:
            raise Disconnected(self.role, self.resource, "the connection is closed")

    def _fail(self) -> None:
        self._refuse_if_closed()
        if self._pending:
            raise Garbled(self.role, self.resource, f"the reply stopped after {len(self._pending)} bytes")
        raise NoReply(self.role, self.resource, f"no reply in {self.timeout:g} s")


class MemoryClock:
    """The world's clock, asked directly."""

    is_simulated = True

    def __init__(self, bench: MockBench, start: float, between: Callable[[], None]) -> None:
        self._world = bench.world
        self._start = start
        self._between = between

    def now(self) -> float:
        return self._start + self._world.now

    def sleep(self, seconds: float) -> float:
        self._between()
        return self._start + self._world.advance(max(seconds, 0.0))


class MemorySite:
    """A bench in memory.

    Attributes:
        bench: the simulated bench; its `control` takes faults and tells the ledger.
    """

    def __init__(self, loaded: LoadedPlan, *, start: float = 1_800_000_000.0) -> None:
        self.bench = MockBench(WorldSpec.from_mapping(simulation_spec(loaded.bench)))
        self._loaded = loaded
        self._roles = roles_needed(loaded.plan, loaded.bench)
        self._start = start

    def resources(self) -> Mapping[str, str]:
        return {role: f"MEMORY::{role}" for role in self._roles}

    def open_all(self) -> tuple[dict[str, Any], list[InstrumentError]]:
        opened = {}
        for role in self._roles:
            dialect = _dialect(self._loaded.dialect_path(role))
            timeout = self._loaded.bench.instruments[role].timeout
            opened[role] = connect(role, MemorySession(self.bench, role, dialect, timeout), dialect)
        return opened, []

    def clock(self, *, not_before: float, between: Callable[[], None]) -> Clock:
        return MemoryClock(self.bench, max(self._start, not_before), between)

    def heart(self, rule: SafeRule, folder: Path, complain: Callable[[str], None]) -> Heart:
        return NoHeart()


@cache
def _dialect(path: Path) -> Dialect:
    return load_model(path, Dialect)
