"""The bench in hand: opened instruments, what they are set to, and the state that `moves.py` allows to change.

Everything that moves the bench between states is in this file (and, for the way out, in `safe_state.py`). Limits go into
the instruments before anything else does. What was set is remembered by role, so that an instrument which lost its
settings can be given them again; a setting that has not changed is not sent twice.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

from drivers import (
    BiasSource,
    Chamber,
    Digitizer,
    DigitizerSetup,
    Identity,
    Lcr,
    Multiplexer,
    Ohmmeter,
    Pulser,
    Refused,
    Supply,
    Thermometer,
)
from runner.sweep.clock import Clock
from runner.sweep.faults import BadReading
from runner.sweep.moves import Move, State, after
from runner.sweep.retry import Kind
from runner.sweep.safe_state import DISCHARGED, SafeReport, SafeRule, discharge_time, reach_safe_state
from runner.sweep.stuck import Manners

_CHARGED = 0.99  # of the rail's set-point
_CHARGE_LOOKS = 12
_RAMP_STEP = 0.25  # s of ramp in one step of the bias current


@dataclass(frozen=True, slots=True)
class Ratings:
    """Limits and figures of the bench that the edge needs; SI.

    Attributes:
        rail_limit: highest rail; supply_current: limit set on the supply.
        current_limit: largest part current; chamber_high_degC: hottest air.
        bias_voltage: highest voltage of the bias source.
        bank_capacitance, bleed, ramp: of the bench file.
        relay_settle: after a relay moved.
        shunt: nominal resistance of the shunt.
    """

    rail_protection: float
    supply_protection: float
    supply_current: float
    current_limit: float
    bias_protection: float
    bias_voltage: float
    chamber_high_degC: float
    bank_capacitance: float
    bleed: float
    ramp: float
    relay_settle: float
    shunt: float
    part_relays: Mapping[int, int] = field(default_factory=dict)
    path_relays: Mapping[str, int] = field(default_factory=dict)


class Bench:
    """Opened instruments and their state.

    Attributes:
        has_comparator: the fixture took a current at which it ends a pulse by itself.

    Args:
        roles: role objects by role name.
        ratings: limits and figures.
        clock: of the bench.
    """

    def __init__(self, roles: Mapping[str, Any], ratings: Ratings, clock: Clock) -> None:
        self.roles = dict(roles)
        self.ratings = ratings
        self.clock = clock
        self.state = State.REST
        self.has_comparator = False
        self.identities: dict[str, Identity] = {}
        self._channel = 0
        self._path = ""
        self._beside = ""
        self._offset: float | None = None
        self._rail = 0.0
        self._bias = 0.0
        self._width: float | None = None
        self._polarity = 1
        self._trip: float | None = None
        self._setup: DigitizerSetup | None = None
        self._asked: DigitizerSetup | None = None
        self._signal: tuple[float, float] | None = None
        self._setpoint: float | None = None
        self._manners: dict[int, Manners] = {}

    # Typed views of the roles; a missing role is a fault of ours, as the plan was checked against the bench.
    @property
    def supply(self) -> Supply:
        return self.roles["supply"]  # type: ignore[no-any-return]

    @property
    def pulser(self) -> Pulser:
        return self.roles["pulser"]  # type: ignore[no-any-return]

    @property
    def digitizer(self) -> Digitizer:
        return self.roles["digitizer"]  # type: ignore[no-any-return]

    @property
    def lcr(self) -> Lcr:
        return self.roles["lcr"]  # type: ignore[no-any-return]

    @property
    def bias_source(self) -> BiasSource:
        return self.roles["bias_source"]  # type: ignore[no-any-return]

    @property
    def chamber(self) -> Chamber:
        return self.roles["chamber"]  # type: ignore[no-any-return]

    @property
    def thermometer(self) -> Thermometer:
        return self.roles["thermometer"]  # type: ignore[no-any-return]

    @property
    def ohmmeter(self) -> Ohmmeter | None:
        return self.roles.get("ohmmeter")

    @property
    def multiplexer(self) -> Multiplexer | None:
        return self.roles.get("multiplexer")

    # ---- setting up

    def meet(self, role: str) -> None:
        """First talk to an instrument: who it is, what it complains of, harmless, limits in.

        An error left in its queue from before is not ours and is cleared; a power-on bit likewise.
        """
        instrument = self.roles[role]
        self.check_identity(role)
        instrument.errors()
        instrument.restarted()
        if role in ("supply", "pulser", "bias_source"):
            instrument.safe()
        self.program_limits(role)
        if role == "multiplexer":
            instrument.open_all()

    def do_without(self, role: str) -> None:
        """Go on as if there were no such instrument."""
        self.roles[role].close()
        del self.roles[role]
        self.identities.pop(role, None)

    def check_identity(self, role: str) -> None:
        """Make sure that the instrument is the one the run began with.

        Raises:
            BadReading: another one answers.
        """
        known = self.identities.get(role)
        found = self.roles[role].identify()
        if known is None:
            self.identities[role] = found
        elif found.text != known.text:
            raise BadReading(
                Kind.IDENTITY, role, f"{found.text!r} answers, the run began with {known.text!r}"
            )

    def program_limits(self, role: str) -> None:
        """Limits into the instrument, before anything else is asked of it."""
        ratings = self.ratings
        if role == "supply":
            self.supply.protect(ratings.rail_protection, ratings.supply_protection)
        elif role == "bias_source":
            self.bias_source.protect(ratings.bias_protection, ratings.bias_voltage)
        elif role == "chamber":
            self.chamber.protect(ratings.chamber_high_degC)

    def restore(self, role: str) -> None:
        """Give an instrument that may have lost its settings everything it had, limits first.

        The energy goes first where the instrument carries it: a supply, bias source or relay that restarted leaves the
        bench at rest on its path, and the move that was under way starts from there.
        """
        if role in ("supply", "bias_source", "multiplexer") and self.state in (State.CHARGED, State.BIASED):
            rail, bias = self._rail, self._bias
            was = self.state
            if role == "supply":
                self.program_limits(role)
            self.relax()
            self.program_limits(role)
            if role == "multiplexer":
                self._close_relays()
            if was is State.CHARGED:
                self.charge(rail)
            elif bias:
                self.bias(bias)
            return
        self.program_limits(role)
        if role == "multiplexer" and self.state is State.WIRED:
            self._close_relays()
        elif role == "pulser":
            if self._trip is not None:
                self.pulser.protect(self._trip)
            if self._width is not None:
                self.pulser.set(self._width, self._polarity)
            if self.state is State.CHARGED:
                self.pulser.on()
        elif role == "digitizer" and self._setup is not None:
            self._setup = self.digitizer.set(self._setup)
        elif role == "lcr" and self._signal is not None:
            self.lcr.set(*self._signal)
        elif role == "chamber" and self._setpoint is not None:
            self.chamber.set(self._setpoint)
            self.chamber.on()

    # ---- chamber and thermometer

    def heat_to(self, setpoint_degC: float) -> None:
        """Send the chamber to a set-point; it runs from now until the safe state."""
        self._setpoint = setpoint_degC
        self.chamber.set(setpoint_degC)
        self.chamber.on()

    def air(self) -> float:
        """Chamber air [degC]."""
        return _finite("chamber", self.chamber.air())

    def body(self, channel: int) -> float:
        """Body of the part on a channel [degC]."""
        reading = _finite("thermometer", self.thermometer.read(channel))
        manners = self._manners.get(channel, Manners()).after(reading)
        self._manners[channel] = manners
        if manners.is_stuck:
            raise BadReading(Kind.STUCK, "thermometer", f"stands at {reading:g} degC to the last digit")
        return reading

    def bank(self) -> float:
        """Voltage of the bank [V]: the supply's own voltmeter sits on it."""
        return _finite("supply", self.supply.measure()[0])

    # ---- moves

    def wire(self, channel: int, path: str, *, beside: str = "") -> None:
        """Close the relays that connect one part to one path: "pulse", "bias" or "resistance".

        `beside`: "offset" also connects the bias source to the offset winding, which is not the part's own and carries no
        current before the bank is charged or after it is discharged.
        """
        state = after(self.state, Move.WIRE)
        self._channel, self._path, self._beside = channel, path, beside
        self._close_relays()
        self.state = state

    def unwire(self) -> None:
        """Open the relays."""
        state = after(self.state, Move.UNWIRE)
        if self.multiplexer is not None:
            self.multiplexer.open_all()
        self.state = state

    def charge(self, rail: float) -> None:
        """Bring the bank to `rail` [V] and let the pulser drive the switch."""
        state = after(self.state, Move.CHARGE)
        ratings = self.ratings
        self._rail = rail
        self.supply.set(rail, ratings.supply_current)
        self.supply.on()
        self.state = state  # from here on there is energy in the bank, whatever comes next
        needed = ratings.bank_capacitance * rail / ratings.supply_current
        self.clock.sleep(1.2 * needed)
        for _ in range(_CHARGE_LOOKS):
            voltage = self.bank()
            if voltage >= _CHARGED * rail:
                break
            self.clock.sleep(max(0.2 * needed, 0.05))
        else:
            resource = self.supply.resource
            what = f"the bank stands at {voltage:.2f} V and will not reach {rail:g} V; check fuse, bleeder and wiring"
            raise Refused("supply", resource, what)
        self.pulser.on()

    def discharge(self) -> float:
        """Rail off, wait for the bleeder; gives how long that took [s]."""
        state = after(self.state, Move.DISCHARGE)
        self.pulser.off()
        self._end_offset()
        self.supply.off()
        # Known by what it was charged to: a voltmeter that is stuck may say that there is nothing left at once.
        waited = discharge_time(self._rail, self.ratings.bleed)
        self.clock.sleep(waited)
        voltage = self.bank()
        while voltage > DISCHARGED:
            seconds = max(discharge_time(1.02 * voltage, self.ratings.bleed), 0.02 * self.ratings.bleed)
            self.clock.sleep(seconds)
            waited += seconds
            if waited > 10 * max(self.ratings.bleed, 1.0):
                what = f"the bank is still at {voltage:.1f} V after {waited:.0f} s; its bleeder may be open"
                raise Refused("supply", self.supply.resource, what)
            voltage = self.bank()
        self.state = state
        return waited

    def bias(self, current: float) -> None:
        """Ramp the bias current to `current` [A]."""
        state = after(self.state, Move.BIAS)
        if abs(current) > self.ratings.current_limit:
            raise ValueError(f"bias of {current!r} A is above the limit; the plan's check let it through")
        if self.state is State.WIRED:
            self._bias = 0.0
            self.bias_source.set(0.0)
            self.bias_source.on()
        self.state = state
        for step in ramp_steps(self._bias, current, self.ratings.ramp * _RAMP_STEP):
            self.bias_source.set(step)
            self.clock.sleep(abs(step - self._bias) / self.ratings.ramp)
            self._bias = step

    def unbias(self) -> None:
        """Ramp the bias current to zero and switch its source off."""
        if self.state is State.BIASED:
            self.bias(0.0)
        state = after(self.state, Move.UNBIAS)
        self.bias_source.off()
        self.state = state

    def offset(self, current: float) -> None:
        """Ramp the current of the offset winding to `current` [A], either sign; at zero its source is switched off."""
        self.state = after(self.state, Move.OFFSET)
        if abs(current) > self.ratings.current_limit:
            raise ValueError(f"offset of {current!r} A is above the limit; the plan's check let it through")
        if current == 0.0:
            self._end_offset()
            return
        if self._offset is None:
            self._offset = 0.0
            self.bias_source.set(0.0)
            self.bias_source.on()
        self._ramp_offset(current)

    def _ramp_offset(self, current: float) -> None:
        assert self._offset is not None
        for step in ramp_steps(self._offset, current, self.ratings.ramp * _RAMP_STEP):
            self.bias_source.set(step)
            self.clock.sleep(abs(step - self._offset) / self.ratings.ramp)
            self._offset = step

    def _end_offset(self) -> None:
        if self._offset is not None:
            self._ramp_offset(0.0)
            self.bias_source.off()
            self._offset = None

    def relax(self) -> None:
        """Take the energy out by whatever move the state allows; afterwards nothing flows and nothing is charged."""
        if self.state is State.CHARGED:
            self.discharge()
        elif self.state is State.BIASED:
            self.unbias()

    def rest(self) -> None:
        """All the way to rest by legal moves."""
        self.relax()
        if self.state is State.WIRED:
            self.unwire()

    def make_safe(self, rule: SafeRule, say: Callable[[str], None]) -> SafeReport:
        """The way out; legal in every state, and the bench counts as at rest afterwards."""
        state = after(self.state, Move.MAKE_SAFE)
        bank = self._rail if self.state is State.CHARGED else 0.0
        report = reach_safe_state(self.roles, rule, self.clock, bank=bank, say=say)
        self.state = state
        self._offset = None
        return report

    # ---- what the measuring is set to; only what has changed is sent

    def set_pulse(
        self, width: float, setup: DigitizerSetup, trip: float, polarity: int = 1
    ) -> DigitizerSetup:
        """Width and polarity, comparator level of the fixture [A] and digitizer settings, which come back as read back."""
        if self._setup is None or self._asked != setup:
            self._setup = None
            self._setup = self.digitizer.set(setup)
            self._asked = setup
        if self._trip != trip:
            self._trip = None
            self.has_comparator = self.pulser.protect(trip)
            self._trip = trip
        if (self._width, self._polarity) != (width, polarity):
            self._width = None
            self.pulser.set(width, polarity)
            self._width, self._polarity = width, polarity
        return self._setup

    def set_signal(self, frequency: float, level: float) -> None:
        """Small signal of the bias method."""
        if self._signal != (frequency, level):
            self._signal = None
            self.lcr.set(frequency, level)
            self._signal = (frequency, level)

    def may_fire(self) -> None:
        """Make sure that a pulse is legal now.

        Raises:
            IllegalMove: the bank is not charged on the pulse path.
        """
        self.state = after(self.state, Move.FIRE)

    def _close_relays(self) -> None:
        if self.multiplexer is None:
            return
        ratings = self.ratings
        relays = [ratings.part_relays[self._channel]]
        if self._path in ratings.path_relays:
            relays.append(ratings.path_relays[self._path])
        if self._beside:
            relays.append(ratings.path_relays[self._beside])
        self.multiplexer.open_all()
        self.multiplexer.close(tuple(relays))
        self.clock.sleep(ratings.relay_settle)


def ramp_steps(start: float, end: float, largest: float) -> tuple[float, ...]:
    """Currents from `start` to `end`, `end` included and `start` not, at most `largest` apart [A]; evenly spaced."""
    count = max(math.ceil(abs(end - start) / largest - 1e-9), 1)
    return (*(start + (end - start) * step / count for step in range(1, count)), end)


def _finite(role: str, value: float) -> float:
    if not math.isfinite(value):
        raise BadReading(Kind.OVERLOAD, role, f"reads {value!r}")
    return value
