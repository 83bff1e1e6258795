"""The bias method on one part at one temperature: ramp to each current, wait, read inductance, current, temperature.

Currents climb and, where the plan says so, come back down. They are set, not predicted: the plan's check has held them
against the limits, the source carries the limit as its protection, and what flows is read back and watched.

A part that the current has warmed out of the soak's band rests at zero current before the next larger one. On the way
down it does not: in a core with memory a rest at zero would be the end of that way.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from drivers import LcrReading
from runner.errors import SafeStop
from runner.plan import Point
from runner.record import Flag, PointRow
from runner.sweep.faults import BadReading, GivenUp
from runner.sweep.flags import Judgement, all_of, judge_bias, judge_temperature
from runner.sweep.moves import State
from runner.sweep.night import Night, Settled
from runner.sweep.retry import Kind, Phase
from runner.sweep.seek import Next, SeekRule, Sought, next_point

_TELLS_RESISTANCE = 0.2  # of the rated current: below it the source's voltmeter says little about the winding
_COOLED = 0.5  # of the soak's band: how near the part must be to where its soak ended before it goes on
_LOOK_AGAIN = 20.0  # s between two looks at a part that cools
_READ_BACK = 0.1  # of the current set, and ...
_READ_BACK_FLOOR = 0.05  # ... A, that the source's own reading may differ


@dataclass(frozen=True, slots=True)
class _Reading:
    """One bias point as read."""

    lcr: LcrReading
    current: float
    voltage: float
    body_degC: float
    air_degC: float
    start: float
    end: float


def bias_series(night: Night, leg: int, part: int, *, settled: Settled, resistance: float) -> None:
    """Carry out the bias points of one part in one leg; the bench is at rest afterwards.

    Args:
        resistance: of the winding at this temperature as measured [ohm], NaN where nobody measured it.

    Raises:
        SafeStop: a limit was met or a stop asked for.
        GivenUp: the leg or the run must end.
    """
    points = night.to_do(leg, part, "bias")
    if not points:
        return
    series = _Series(night, leg, part, settled, resistance)
    night.recovery.fresh_point()
    try:
        night.recovery.carry_out(Phase.BIAS, series.get_ready)
    except GivenUp as given_up:
        night.absorb(given_up, points)
    else:
        series.go(points)
    night.recovery.carry_out(Phase.BIAS, night.bench.rest)


class _Series:
    def __init__(self, night: Night, leg: int, part: int, settled: Settled, resistance: float) -> None:
        plan = night.loaded.plan
        assert plan.bias is not None
        self.night, self.leg, self.part, self.settled = night, leg, part, settled
        self.plan, self.spec = plan.bias, plan.parts[part]
        self.resistance = resistance
        self.body_degC = math.nan
        self.last_current = 0.0
        self.last_number = -1
        self.last_reading: tuple[float, LcrReading] | None = None
        self.history = [
            Sought(one.x, one.current, one.inductance)
            for one in night.behind.history.get((leg, part, "bias"), ())
        ]
        current = plan.bias.current
        self.rule = (
            None
            if isinstance(current, tuple)
            else SeekRule(current.from_, current.to, current.budget, plan.extract.drops, current.until.isat)
        )

    def get_ready(self) -> None:
        """Wired for bias, meter set, no current yet; from any state."""
        bench = self.night.bench
        bench.rest()
        bench.wire(self.spec.channel, "bias")
        bench.set_signal(self.plan.signal.frequency, self.plan.signal.level)
        bench.bias(0.0)

    def go(self, points: Sequence[Point]) -> None:
        """Measure the points, in order, until something ends the series."""
        self.night.time = self.night.clock.now()
        for index, point in enumerate(points):
            self.night.check(self.night.time)
            self.night.recovery.fresh_point()
            try:
                why = self._point(point)
            except GivenUp as given_up:
                if not self.night.absorb(given_up, points[index:]):
                    return
                continue
            if why is not None:
                return

    def _point(self, point: Point) -> str | None:
        current, seeking = point.bias, ""
        if self.rule is not None:
            proposal = next_point(self.history, self.rule)
            if not isinstance(proposal, Next):
                self.night.write_notes()
                self.night.log.event(
                    "climb_end", f"{self.night.label(self.part)}: {proposal.why}", point=self.last_number
                )
                return proposal.why
            current, seeking = proposal.x, proposal.why
        if current > self.last_current:
            self._let_cool()
        self.last_current = current
        reading = self.night.recovery.carry_out(Phase.BIAS, lambda: self._read(current))
        return self._record(point, current, reading, seeking)

    def _let_cool(self) -> None:
        """Rest at zero current while the part is warmer than its soak's band allows; as long as a soak may last."""
        night, bench, soak = self.night, self.night.bench, self.night.loaded.plan.temperatures.soak
        settled = self.settled.body_degC.get(self.part, math.nan)
        if bench.state is not State.BIASED or not self.body_degC - settled > soak.within:
            return
        night.log.event(
            "rest",
            f"{night.label(self.part)}: {self.body_degC - settled:.1f} K warmer than its soak left it; "
            "no current until it has cooled",
            point=self.last_number,
        )
        night.recovery.carry_out(Phase.BIAS, lambda: bench.bias(0.0))
        until = night.clock.now() + soak.give_up
        while self.body_degC - settled > _COOLED * soak.within and night.clock.now() < until:
            night.check(night.clock.now())
            night.clock.sleep(_LOOK_AGAIN)
            self.body_degC = night.recovery.carry_out(Phase.BIAS, lambda: bench.body(self.spec.channel))

    def _read(self, current: float) -> _Reading:
        """Ramp, settle, read.

        Raises:
            InstrumentError: an instrument failed.
            BadReading: the meter has no number, the source is stuck, or the part is open or shorted.
        """
        bench, clock = self.night.bench, self.night.clock
        if bench.state is not State.BIASED:
            self.get_ready()
        start = self.night.time
        bench.bias(current)
        clock.sleep(self.plan.settle)
        lcr = bench.lcr.read()
        flowing, voltage = bench.bias_source.measure()
        self._judge_part(current, lcr, flowing, voltage)
        if not abs(flowing - current) <= max(_READ_BACK * current, _READ_BACK_FLOOR):
            raise BadReading(Kind.STUCK, "bias_source", f"reads {flowing:.4g} A, set to {current:.4g} A")
        if lcr.overload:
            raise BadReading(Kind.OVERLOAD, "lcr", "no number, but an overload")
        if self.last_reading is not None and self.last_reading[1] == lcr and self.last_reading[0] != current:
            self.last_reading = None
            raise BadReading(Kind.STUCK, "lcr", f"repeats itself to the last digit at {current:.4g} A")
        self.last_reading = (current, lcr)
        return _Reading(lcr, flowing, voltage, bench.body(self.spec.channel), bench.air(), start, clock.now())

    def _judge_part(self, current: float, lcr: LcrReading, flowing: float, voltage: float) -> None:
        judgement = judge_bias(
            wanted=current,
            flowing=flowing,
            inductance=math.nan if lcr.overload else lcr.inductance,
            resistance=self._winding(flowing, voltage),
            nominal_inductance=self.spec.inductance,
            nominal_resistance=self.spec.resistance_at(self.night.setpoint_degC),
            rated_current=self.spec.rated_current,
        )
        for flag, kind in ((Flag.PART_OPEN, Kind.OPEN), (Flag.PART_SHORT, Kind.SHORT)):
            if judgement.flags & flag:
                raise BadReading(kind, "part", "; ".join(judgement.texts))

    def _winding(self, flowing: float, voltage: float) -> float:
        """Resistance by the bias source's own meters [ohm], NaN where the current is too small for it."""
        return voltage / flowing if flowing > _TELLS_RESISTANCE * self.spec.rated_current else math.nan

    def _record(self, point: Point, current: float, reading: _Reading, seeking: str) -> str | None:
        night = self.night
        limit = night.pulse_limits(self.part).current
        if abs(reading.current) > 1.01 * limit:
            raise SafeStop(f"{night.label(self.part)}: {reading.current:.3g} A flow, limit {limit:g} A")
        why = night.watch_body(self.part, reading.body_degC, self.body_degC)
        self.body_degC = reading.body_degC
        self.history.append(Sought(current, reading.current, reading.lcr.inductance))
        if self.rule is not None and why is None:
            proposal = next_point(self.history, self.rule)
            why = None if isinstance(proposal, Next) else proposal.why
        judgement = all_of(
            (
                judge_temperature(
                    reading.body_degC,
                    self.settled.body_degC.get(self.part, reading.body_degC),
                    night.loaded.plan.temperatures.soak.within,
                    is_settled=self.settled.is_settled.get(self.part, True),
                ),
                Judgement(night.recovery.flags),
            )
        )
        winding = self._winding(reading.current, reading.voltage)
        row = PointRow(
            plan_index=point.plan_index,
            leg=self.leg,
            part=self.part,
            method="bias",
            start_time=reading.start,
            end_time=reading.end,
            quality=int(judgement.flags),
            temperature_setpoint=night.setpoint_degC,
            body_temperature=reading.body_degC,
            air_temperature=reading.air_degC,
            bias_current_setpoint=current,
            bias_current=reading.current,
            inductance=reading.lcr.inductance,
            resistance=self.resistance if math.isnan(winding) else winding,
            ac_resistance=reading.lcr.resistance,
            test_frequency=self.plan.signal.frequency,
        )
        if seeking:
            night.note("seek", f"{current:.4g} A: {seeking}")
        self.last_number = night.record(row, judgement, ends=None if why is None else ("climb_end", why))
        return why
