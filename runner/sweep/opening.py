"""From a bench file to opened instruments: where they are, with which dialect, who they say they are.

A simulated bench is started here, as a process of its own, and this is the only place that knows it: what comes back is
resource names and a clock, as for any bench. The watchdog opens the same instruments from the same plain description
(`Reach`), which travels to it as JSON.
"""

import contextlib
import json
import time
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Protocol, Self

from drivers import Dialect, InstrumentError, connect, open_session
from mock_instruments import Launched, launch
from runner.errors import BenchError
from runner.plan import Bench as BenchFile
from runner.plan import LoadedBench, LoadedPlan, Plan, load_model, simulation_spec
from runner.sweep.bench import Ratings
from runner.sweep.clock import BenchClock, Clock, WallClock
from runner.sweep.heart import Heart, WatchedHeart, patience
from runner.sweep.safe_state import SafeRule

_COMPLIANCE = 3.0  # V of the bias source beyond the drop in the winding, for leads and relays
_PROTECTION = 1.02  # protections stand above the limit itself, so that the limit can be used
_GOODBYE_LOOK = 0.02  # s between two looks whether a simulated bench has ended, and ...
_GOODBYE_LOOKS = 50  # ... how many
_SUPPLY_SHARE = 0.95  # of the supply's largest current is used to charge the bank


@dataclass(frozen=True, slots=True)
class Reach:
    """How to reach an instrument: all that another process needs to open it as well."""

    role: str
    resource: str
    dialect: str
    timeout: float

    def read_dialect(self) -> Dialect:
        """Its dialect.

        Raises:
            InputError: the file is wrong.
        """
        return load_model(Path(self.dialect), Dialect)

    def open(self) -> Any:
        """Connect and give the role object.

        Raises:
            InstrumentError: nobody answers.
            InputError: the dialect file is wrong.
        """
        dialect = self.read_dialect()
        return connect(self.role, open_session(self.resource, dialect, self.timeout), dialect)

    @classmethod
    def from_json(cls, given: Mapping[str, Any]) -> Self:
        return cls(**given)


class Site(Protocol):
    """Where the instruments of a run are; in tests, a bench in memory."""

    def resources(self) -> Mapping[str, str]:
        """Resource name of each role."""

    def open_all(self) -> tuple[dict[str, Any], list[InstrumentError]]:
        """Open every instrument; those that cannot be opened come back as errors, all of them."""

    def clock(self, *, not_before: float, between: Callable[[], None]) -> Clock:
        """The bench's clock, starting now but after `not_before` [UTC s]; `between` is called in sleeps."""

    def heart(self, rule: SafeRule, folder: Path, complain: Callable[[str], None]) -> Heart:
        """Start a watchdog for this bench."""


class VisaSite:
    """Instruments reached over VISA.

    Args:
        reaches: one for each role, in the order in which they are opened.
        control: control port of a simulated bench, None for a real one.
    """

    def __init__(self, reaches: tuple[Reach, ...], control: int | None) -> None:
        self._reaches = reaches
        self._control = control
        self._start = 0.0
        self._bench_clock: BenchClock | None = None

    def resources(self) -> Mapping[str, str]:
        return {reach.role: reach.resource for reach in self._reaches}

    def open(self, role: str) -> Any:
        """Open one instrument.

        Raises:
            InstrumentError: nobody answers.
        """
        return next(reach for reach in self._reaches if reach.role == role).open()

    def open_all(self) -> tuple[dict[str, Any], list[InstrumentError]]:
        opened: dict[str, Any] = {}
        lost: list[InstrumentError] = []
        for reach in self._reaches:
            try:
                opened[reach.role] = reach.open()
            except InstrumentError as error:
                lost.append(error)
        return opened, lost

    def clock(self, *, not_before: float, between: Callable[[], None]) -> Clock:
        self._start = max(time.time(), not_before)
        if self._control is None:
            return WallClock(between=between, not_before=not_before)
        self._bench_clock = BenchClock(self._control, start=self._start, between=between)
        return self._bench_clock

    def say_goodbye(self) -> None:
        """Tell a simulated bench that nobody needs it any more.

        Raises:
            OSError: it has gone already.
        """
        if self._control is None:
            return
        clock = self._bench_clock or BenchClock(self._control, start=0.0)
        try:
            clock.ask({"do": "quit"})
        finally:
            clock.close()

    def heart(self, rule: SafeRule, folder: Path, complain: Callable[[str], None]) -> Heart:
        orders = {
            "reaches": [asdict(reach) for reach in self._reaches],
            "control": self._control,
            "start": self._start,
            "not_before": self._start,
            "rule": asdict(rule),
            "folder": str(folder.absolute()),
            "patience": patience(max(reach.timeout for reach in self._reaches)),
        }
        return WatchedHeart(json.dumps(orders), complain)


@contextmanager
def on_site(loaded: LoadedPlan | LoadedBench, roles: Iterable[str]) -> Iterator[VisaSite]:
    """Say where the instruments are; a simulated bench is served inside, and ends when the last client has gone.

    Raises:
        BenchError: the simulated bench does not start.
    """
    bench = loaded.bench
    roles = [role for role in bench.instruments if role in set(roles)]
    if bench.simulation is None:
        yield VisaSite(
            tuple(_reach(loaded, role, bench.instruments[role].resource or "") for role in roles), None
        )
        return
    try:
        launched = launch(simulation_spec(bench))
    except (RuntimeError, OSError) as error:
        raise BenchError(f"{loaded.bench_path}: {error}") from error
    where = {role: f"TCPIP::127.0.0.1::{launched.ports[role]}::SOCKET" for role in roles}
    site = VisaSite(tuple(_reach(loaded, role, where[role]) for role in roles), launched.control)
    try:
        yield site
    finally:
        end_simulation(site, launched)


def end_simulation(site: VisaSite, launched: Launched) -> None:
    """Ask the simulated bench to end, and wait a moment for it; it ends by itself when nobody talks to it any more."""
    with contextlib.suppress(OSError, ValueError):
        site.say_goodbye()
    for _ in range(_GOODBYE_LOOKS):
        if launched.process.poll() is not None:
            return
        time.sleep(_GOODBYE_LOOK)


def _reach(loaded: LoadedPlan | LoadedBench, role: str, resource: str) -> Reach:
    return Reach(role, resource, str(loaded.dialect_path(role)), loaded.bench.instruments[role].timeout)


def roles_needed(plan: Plan, bench: BenchFile) -> tuple[str, ...]:
    """Roles that a run uses: by its methods, and whatever watches over them."""
    needed = {"chamber", "thermometer", "ohmmeter", "multiplexer"}
    if plan.pulse is not None:
        needed |= {"supply", "pulser", "digitizer"}
    if plan.bias is not None:
        needed |= {"lcr", "bias_source"}
    if plan.remanence is not None and any(plan.remanence.offset):
        needed |= {"bias_source"}
    return tuple(role for role in bench.instruments if role in needed)


def ratings(plan: Plan, bench: BenchFile) -> Ratings:
    """Limits and figures that the edge needs, from plan and bench file."""
    fixture, multiplexer = bench.fixture, bench.multiplexer
    limits = plan.limits
    hottest = limits.body_degC
    drop = max((part.resistance_at(hottest) for part in plan.parts), default=0.0) * limits.current
    compliance = drop + _COMPLIANCE
    most = bench.bias_source.maximum.voltage if bench.bias_source is not None else None
    paths = multiplexer.paths if multiplexer is not None else None
    supply, source = bench.supply, bench.bias_source
    return Ratings(
        rail_protection=min(limits.rail * _PROTECTION, supply.maximum.voltage) if supply is not None else 0.0,
        supply_protection=supply.maximum.current if supply is not None else 0.0,
        supply_current=_SUPPLY_SHARE * supply.maximum.current if supply is not None else 0.0,
        current_limit=limits.current,
        bias_protection=min(limits.current * _PROTECTION, source.maximum.current)
        if source is not None
        else 0.0,
        chamber_high_degC=limits.chamber_degC[1],
        bias_voltage=compliance if most is None else min(compliance, most),
        bank_capacitance=fixture.bank.capacitance if fixture.bank is not None else 0.0,
        bleed=fixture.bank.bleed if fixture.bank is not None else 0.0,
        ramp=source.ramp if source is not None else 1.0,
        relay_settle=multiplexer.settle if multiplexer is not None else 0.0,
        shunt=fixture.shunt.resistance.value if fixture.shunt is not None else 1.0,
        part_relays=dict(multiplexer.parts) if multiplexer is not None else {},
        path_relays={name: relay for name, relay in paths if relay is not None} if paths is not None else {},
    )


def safe_rule(plan: Plan | None, bench: BenchFile) -> SafeRule:
    """What the way to the safe state needs to know of the bench."""
    bank, chamber, source = bench.fixture.bank, bench.chamber, bench.bias_source
    return SafeRule(
        bleed=bank.bleed if bank is not None else 0.0,
        highest_rail=plan.limits.rail if plan is not None else 0.0,
        ramp=source.ramp if source is not None else 1.0,
        chamber_degC=chamber.safe_degC if chamber is not None else 25.0,
    )
