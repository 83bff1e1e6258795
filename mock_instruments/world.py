"""The one coupled world behind all the instruments: time, bank, switch, parts, air, relays. No bytes, no sockets.

Instruments call the methods below with SI values and get true physical quantities back; what an instrument
adds to them (noise, gain, offset, rounding) is the instrument's own business. Everything moves by `advance`
alone, so equal calls give equal worlds. Not thread-safe by itself: whoever serves it holds `lock` around
each message.
"""

import math
import threading
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np

from mock_instruments.circuit import Bank, Loop, Shot, Switch, fire
from mock_instruments.flux import FloatArray, FluxLaw, copper_resistance
from mock_instruments.ledger import Ledger
from mock_instruments.spec import PartSpec, WorldSpec
from mock_instruments.thermal import Air, Body, relax_bank

LONGEST_THERMAL_STEP = 10.0  # s; chords of the overshoot over this are good to 0.3 mK (see tests)
SUPPLY_OUTPUT_RESISTANCE = 0.05  # ohm, leads included
CHARGED = 1.0  # V: a bank above this counts as charged when a relay moves
FLOWING = 1e-3  # A: more than this counts as current when a relay moves
PATHS = ("pulse", "bias", "resistance", "offset")
# The offset winding is not the part's own: its path may be closed beside the pulse path, and beside no other.
TOGETHER = frozenset({"pulse", "offset"})


@dataclass(slots=True)
class Part:
    """One part on the bench: what it is, and what of it changes (temperature, memory [A], an injected fault)."""

    channel: int
    spec: PartSpec
    body: Body
    offset: float = 0.0
    fault: str = ""

    @property
    def law(self) -> FluxLaw:
        return self.spec.law.shorted() if self.fault == "short" else self.spec.law

    @property
    def temperature_degC(self) -> float:
        return self.body.temperature_degC

    @property
    def winding_resistance(self) -> float:
        whole = copper_resistance(self.spec.resistance, self.temperature_degC)
        return 0.2 * whole if self.fault == "short" else whole


@dataclass(frozen=True, slots=True)
class Fed:
    """What the bias source drives: a winding of ``part`` with ``ratio`` of the turns of the part's own.

    An offset winding is of the same wire, so its resistance goes with its turns. Its source holds the current whatever a
    pulse induces (a choke in series, as on real benches).
    """

    part: Part
    is_offset: bool
    ratio: float

    @property
    def resistance(self) -> float:
        return self.ratio * self.part.winding_resistance

    @property
    def is_open(self) -> bool:
        return self.part.fault == "open" and not self.is_offset


@dataclass(frozen=True, slots=True)
class Pulse:
    """What the trigger leaves for the digitizer: the shot (None: nothing carried current) and how it was wired."""

    shot: Shot | None
    polarity: int
    start: float  # s, world time of the trigger
    width: float
    open_voltage: float  # V across the open fixture while the switch is on

    def voltage(self, time: FloatArray) -> FloatArray:
        """Voltage across the part [V] at ``time`` [n] s from the switch closing."""
        if self.shot is not None:
            return self.polarity * self.shot.part_voltage(time)
        return np.where((time >= 0) & (time < self.width), self.polarity * self.open_voltage, 0.0)

    def shunt(self, time: FloatArray) -> FloatArray:
        """Shunt voltage [V] at ``time`` [n] s from the switch closing."""
        return np.zeros(time.shape) if self.shot is None else self.polarity * self.shot.shunt_voltage(time)


class World:
    """The simulated bench at one instant. ``spec`` is the truth about it; see `WorldSpec`."""

    def __init__(self, spec: WorldSpec) -> None:
        self.spec = spec
        self.lock = threading.RLock()
        self.now = 0.0
        start = spec.ambient_degC
        self.parts = {
            channel: Part(
                channel,
                part,
                Body(
                    part.time_constants,
                    (part.weight, 1.0 - part.weight),
                    part.thermal_resistance,
                    [start, start],
                ),
            )
            for channel, part in sorted(spec.parts.items())
        }
        self.chamber = Air(start, spec.chamber_ramp, spec.overshoot, origin_degC=start, target_degC=start)
        self.bank_voltage = 0.0
        self.supply_on = False
        self.supply_voltage = 0.0
        self.supply_limit = 0.0
        self.bias_on = False
        self.bias_target = 0.0
        self.bias_voltage_limit = math.inf
        self.bias_current = 0.0
        self.closed: frozenset[int] = frozenset()
        self.ledger = Ledger(chamber_degC=(start, start))
        self.on_trigger: list[Callable[[Pulse], None]] = []
        self.used: list[Callable[[Part], None]] = []
        for part in self.parts.values():
            self.ledger.saw_body(part.channel, start)
            self.ledger.saw_current(part.channel, 0.0)

    # -- time ----------------------------------------------------------------------------------------------

    def advance(self, seconds: float) -> float:
        """Let ``seconds`` [s] pass and return the new world time [s]."""
        if not (seconds >= 0.0 and math.isfinite(seconds)):
            raise ValueError(f"time goes forward by a finite number of seconds, got {seconds!r}")
        if seconds == 0.0:
            return self.now
        supply = (
            (self.supply_voltage, self.supply_limit, SUPPLY_OUTPUT_RESISTANCE) if self.supply_on else None
        )
        if self.bank_voltage > 0.0 or supply is not None:
            self.bank_voltage = relax_bank(
                self.bank_voltage,
                seconds,
                capacitance=self.spec.bank_capacitance,
                bleeder=self.spec.bleeder,
                supply=supply,
            )
            self.ledger.saw_bank(self.bank_voltage, self.spec.bank_capacitance)
        biased = self._fed() if self.bias_current or self.bias_on else None
        left = seconds
        while left > 0.0:
            step = self._thermal_step(left, biased)
            left = left - step if left - step > 1e-12 else 0.0
        return self.now

    def _thermal_step(self, left: float, biased: "Fed | None") -> float:
        before = self.bias_current
        goal = self._bias_goal(biased)
        # Break where the ramp of the bias ends: until then the power is a parabola, afterwards it is
        # constant.
        ramp = abs(goal - before) / self.spec.bias_slew
        step = min(left, LONGEST_THERMAL_STEP, ramp if ramp > 1e-6 else math.inf)
        self._move_bias(
            goal if step >= ramp else before + math.copysign(self.spec.bias_slew * step, goal - before),
            biased,
        )
        after = self.bias_current
        mean_square = (before * before + before * after + after * after) / 3.0
        air_before = self.chamber.air_degC(self.now)
        self.now += step
        air_after = self.chamber.air_degC(self.now)
        self.ledger.saw_air(air_after)
        for part in self.parts.values():
            power = mean_square * biased.resistance if biased and part is biased.part else 0.0
            part.body.step(step, air_before, air_after, power)
            self.ledger.saw_body(part.channel, part.temperature_degC)
        return step

    # -- supply, bias, chamber, relays ---------------------------------------------------------------------

    def set_supply(self, *, on: bool, voltage: float, limit: float) -> None:
        self.supply_on, self.supply_voltage, self.supply_limit = on, voltage, limit

    @property
    def supply_current(self) -> float:
        """What the supply delivers into the bank now [A]."""
        return self._bank().supplied(self.bank_voltage) if self.supply_on else 0.0

    def set_bias(self, *, on: bool, current: float, voltage_limit: float) -> None:
        """Target of the bias source; the current slews there. Switching off interrupts it at once."""
        self.bias_on, self.bias_target, self.bias_voltage_limit = on, current, voltage_limit
        if not on:
            self._move_bias(0.0, self._fed())

    @property
    def bias_voltage(self) -> float:
        """Voltage the bias source sees across the part, sensed [V]; its limit when nothing carries the current."""
        fed = self._fed()
        if not self.bias_on:
            return 0.0
        if fed is None or fed.is_open:
            return self.bias_voltage_limit if self.bias_target else 0.0
        return self.bias_current * fed.resistance

    def set_chamber(self, *, on: bool, setpoint_degC: float) -> None:
        """The chamber brings its own sensor to the set-point, so the air ends up off by the sensor's offset."""
        self.chamber.command(self.now, on=on, target_degC=setpoint_degC - self.spec.chamber_offset)

    def air_degC(self) -> float:
        return self.chamber.air_degC(self.now)

    def move_relays(self, closed: Iterable[int]) -> None:
        """Close exactly these relays; what moves under current or on a charged bank is written down."""
        wanted = frozenset(closed)
        if wanted == self.closed:
            return
        self.ledger.relay_moves += 1
        self.ledger.relay_moves_under_current += abs(self.bias_current) > FLOWING
        self.ledger.relay_moves_on_charged_bank += self.bank_voltage > CHARGED
        carrying = self._fed()
        self.closed = wanted
        if self.spec.relays.present:
            paths = {name for name, number in self.spec.relays.paths.items() if number in wanted}
            parts = sum(number in wanted for number in self.spec.relays.parts.values())
            self.ledger.paths_joined += len(paths) > 1 and paths != TOGETHER
            self.ledger.parts_joined += parts > 1
        if self._fed() != carrying:
            self._move_bias(0.0, carrying)

    def connected(self, path: str) -> Part | None:
        """The part that ``path`` reaches now: both its relays closed; without a multiplexer, the first part."""
        relays = self.spec.relays
        if not relays.present:
            return next(iter(self.parts.values()), None)
        if relays.paths.get(path) not in self.closed:
            return None
        return next((part for c, part in self.parts.items() if relays.parts.get(c) in self.closed), None)

    # -- the part under test -------------------------------------------------------------------------------

    def fire(self, width: float, *, polarity: int = 1, trip_current: float = math.inf) -> Pulse:
        """One pulse of ``width`` [s]: heats, magnetises, droops the bank, triggers whoever listens."""
        part = self._used("pulse")
        shot = None if part is None else self._shoot(part, width, polarity, trip_current)
        pulse = Pulse(shot, polarity, self.now, width, self.bank_voltage)
        self.ledger.saw_pulse(self.now, shot.delivered if shot else 0.0)
        if shot is not None and part is not None:
            self.bank_voltage = shot.bank_after
            self.ledger.saw_current(part.channel, shot.peak)
            part.body.absorb(shot.part_heat)
            self.ledger.saw_body(part.channel, part.temperature_degC)
        for listener in self.on_trigger:
            listener(pulse)
        self.advance(max(width, shot.end if shot else 0.0))
        return pulse

    def small_signal(self) -> tuple[float, float] | None:
        """Incremental inductance [H] and winding resistance [ohm] on the bias path at this bias; None: open."""
        part = self._used("bias")
        if part is None:
            return None
        branch = part.law.at(part.temperature_degC).still(part.offset)
        return float(branch.slope(np.asarray(self.bias_current))), part.winding_resistance

    def path_resistance(self, path: str) -> float | None:
        """Winding resistance of the part on ``path`` [ohm]; None: open."""
        part = self._used(path)
        return None if part is None else part.winding_resistance

    def body_degC(self, channel: int) -> float | None:
        part = self.parts.get(channel)
        return None if part is None else part.temperature_degC

    def switched_on(self) -> dict[str, object]:
        """What is on now, as the ledger tells it (the pulser's own output is added by the server)."""
        return {
            "supply": self.supply_on,
            "bias": self.bias_on,
            "bias_current": self.bias_current,
            "bank_voltage": self.bank_voltage,
            "chamber": self.chamber.on,
            "chamber_setpoint": self.chamber.target_degC + self.spec.chamber_offset,
            "relays": sorted(self.closed),
        }

    # -- inside --------------------------------------------------------------------------------------------

    def _bank(self) -> Bank:
        return Bank(
            self.spec.bank_capacitance,
            self.spec.bank_resistance,
            self.spec.bleeder,
            supply_voltage=self.supply_voltage if self.supply_on else 0.0,
            supply_current=self.supply_limit if self.supply_on else 0.0,
            supply_resistance=SUPPLY_OUTPUT_RESISTANCE,
        )

    def _shoot(self, part: Part, width: float, polarity: int, trip_current: float) -> Shot:
        curve = part.law.at(part.temperature_degC)
        standing = polarity * self.bias_current if self.connected("bias") is part else 0.0
        fed = self._fed()
        field = (
            polarity * fed.ratio * self.bias_current if fed and fed.is_offset and fed.part is part else 0.0
        )
        shot = fire(
            self._bank(),
            Switch(self.spec.switch_resistance),
            Loop(self.spec.shunt, self.spec.shunt_inductance, part.winding_resistance),
            voltage=self.bank_voltage,
            width=width,
            initial_current=standing,
            trip_current=trip_current,
            rising=replace(curve.growing(polarity * part.offset, max(0.0, standing, field)), field=field),
        )
        part.offset = polarity * shot.falling.offset
        return shot

    def _fed(self) -> "Fed | None":
        """What the bias source drives: the part's own winding on the bias path, or its offset winding."""
        part = self.connected("bias")
        if part is not None:
            return Fed(part, False, 1.0)
        part = self.connected("offset") if self.spec.relays.present else None
        if part is None or not part.spec.offset_turns:
            return None
        return Fed(part, True, part.spec.offset_turns / part.spec.turns)

    def _bias_goal(self, fed: "Fed | None") -> float:
        if not self.bias_on or fed is None or fed.is_open:
            return 0.0
        most = self.bias_voltage_limit / fed.resistance
        return max(-most, min(most, self.bias_target))

    def _move_bias(self, current: float, fed: "Fed | None") -> None:
        part = fed.part if fed else None
        if fed and part is not None and abs(current) > abs(self.bias_current) and part.law.memory:
            sign = math.copysign(1.0, current)
            start = max(0.0, sign * self.bias_current * fed.ratio)
            growing = part.law.at(part.temperature_degC).growing(sign * part.offset, start)
            part.offset = sign * growing.offset_at(abs(current) * fed.ratio)
        self.bias_current = current
        if fed and current:
            saw = self.ledger.saw_offset if fed.is_offset else self.ledger.saw_current
            saw(fed.part.channel, current)

    def _used(self, path: str) -> Part | None:
        """The part that ``path`` is about to use, unless it is open; whoever plans part faults is told first."""
        part = self.connected(path)
        if part is None:
            return None
        for listener in self.used:
            listener(part)
        return None if part.fault == "open" else part
