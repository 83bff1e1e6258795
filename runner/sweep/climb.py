"""The pulse method on one part at one temperature: climb from the shortest width, each step only where it is predicted.

Between two widths of the plan scouting pulses are fired where the prediction asks for them; they are looked at and not
recorded. The climb ends at its last width, where `stop_at` is met, where no step worth firing is safe, or where an
instrument gives up. Sought widths take the same way: the seeker proposes, the prediction disposes.
"""

import math
from collections.abc import Sequence
from functools import partial

from runner.errors import SafeStop
from runner.plan import Point
from runner.record import CaptureRow, Flag, PointRow, SettingRow
from runner.sweep.faults import BadReading, GivenUp
from runner.sweep.flags import (
    Judgement,
    all_of,
    judge_clipping,
    judge_part_pulse,
    judge_pulse,
    judge_temperature,
)
from runner.sweep.limits import Halt, Step, first_step, next_step
from runner.sweep.look import Look
from runner.sweep.night import Night, Settled
from runner.sweep.pulse_point import PulseFixture, PulsePoint
from runner.sweep.retry import Kind, Phase
from runner.sweep.seek import Next, SeekRule, Sought, next_point
from runner.sweep.stopping import StopAt, judge_stop

_SCOUT_REPEATS = 1
_MOST_SCOUTS = 120  # in one climb; one that needs more is not getting anywhere


def climb(night: Night, leg: int, part: int, *, settled: Settled, resistance: float) -> None:
    """Carry out the pulse points of one part in one leg; the bench is at rest afterwards.

    Args:
        resistance: of the winding at this temperature as measured [ohm], NaN where nobody measured it.

    Raises:
        SafeStop: a limit was met or a stop asked for.
        GivenUp: the leg or the run must end.
    """
    points = night.to_do(leg, part, "pulse")
    if not points:
        return
    walk = _Climb(night, leg, part, settled, resistance)
    night.recovery.fresh_point()
    try:
        night.recovery.carry_out(Phase.CLIMB, walk.fixture.get_ready)
    except GivenUp as given_up:
        night.absorb(given_up, points)
    else:
        walk.go(points)
    night.recovery.carry_out(Phase.CLIMB, night.bench.rest)


class _Climb:
    """What one climb knows while it goes on."""

    def __init__(self, night: Night, leg: int, part: int, settled: Settled, resistance: float) -> None:
        plan = night.loaded.plan
        assert plan.pulse is not None
        self.night, self.leg, self.part, self.settled = night, leg, part, settled
        self.pulse, self.spec = plan.pulse, plan.parts[part]
        self.resistance = resistance
        nominal = self.spec.resistance_at(night.setpoint_degC)
        self.limits = night.pulse_limits(part)
        self.fixture = PulseFixture(
            night.bench,
            night.loaded,
            part,
            resistance=nominal if math.isnan(resistance) else resistance,
            limit=self.limits.current,
        )
        stop = self.pulse.stop_at
        self.stop = StopAt() if stop is None else StopAt(stop.current, stop.drop)
        self.last: Look | None = None
        self.expected = 0.0
        self.initial_slope = math.nan
        self.body_degC = math.nan
        self.scouts = 0
        self.last_number = -1
        self.ceiling = math.inf
        self.history = [
            Sought(one.x, one.current, one.inductance)
            for one in night.behind.history.get((leg, part, "pulse"), ())
        ]
        self.rule = _seek_rule(night)

    def go(self, points: Sequence[Point]) -> None:
        """Measure the points, in order, until something ends the climb."""
        self.night.time = self.night.clock.now()
        for index, point in enumerate(points):
            self.night.check(self.night.time)
            self.night.recovery.fresh_point()
            self.fixture.fresh_point()
            try:
                why = self._point(point)
            except GivenUp as given_up:
                if not self.night.absorb(given_up, points[index:]):
                    return
                continue
            if why is not None:
                return

    def _point(self, point: Point) -> str | None:
        """One point; gives why the climb ends with it, or before it."""
        width, seeking = point.width, ""
        if self.rule is not None:
            proposal = next_point(self.history, self.rule, ceiling=self.ceiling)
            if not isinstance(proposal, Next):
                return self._end(proposal.why)
            width, seeking = proposal.x, proposal.why
        halt = self._approach(width)
        if (
            halt is not None
            and self.rule is not None
            and self.last is not None
            and self.ceiling > self.last.width
        ):
            self.ceiling = self.last.width
            return self._point(point)
        if halt is not None:
            return self._end(halt)
        return self._measure(point, width, seeking)

    # ---- getting there

    def _approach(self, width: float) -> str | None:
        """Scouting pulses up to where a pulse of `width` [s] is predicted to be safe; gives why there is no way."""
        if width > self.fixture.longest:
            return f"{width * 1e6:.4g} us is longer than the digitizer can show ({self.fixture.longest * 1e6:.4g} us)"
        while True:
            step = self._next(width)
            if isinstance(step, Halt):
                return step.why
            expected = (
                step.prediction.current
                if step.prediction
                else self.pulse.rail * step.width / self.spec.inductance
            )
            if step.width >= width:
                self.expected = expected
                return None
            if self.scouts >= _MOST_SCOUTS:
                return f"{self.scouts} scouting pulses did not get to {width * 1e6:.4g} us"
            self.scouts += 1
            self.night.check(self.night.time)
            self.night.note(
                "climb", f"scouting pulse of {step.width * 1e6:.4g} us on the way to {width * 1e6:.4g} us"
            )
            seen = self.night.recovery.carry_out(
                Phase.CLIMB,
                partial(self._shoot, step.width, expected, repeats=_SCOUT_REPEATS, conditioning=0),
                larger=self.fixture.take_larger,
            )
            if (why := self._learn(seen)) is not None:
                return why

    def _next(self, width: float) -> Step | Halt:
        if self.last is None:
            return first_step(
                width,
                limits=self.limits,
                nominal_inductance=self.spec.inductance,
                drive=self.pulse.rail,
                shortest=self.fixture.shortest,
            )
        return next_step(self.last, width, self.limits, period=self.pulse.rest)

    def _shoot(self, width: float, expected: float, *, repeats: int, conditioning: int) -> PulsePoint:
        """Measure a width; a part that is open or shorted is a bad reading."""
        seen = self.fixture.measure(
            width, expected, repeats=repeats, conditioning=conditioning, start=self.night.time
        )
        judgement = judge_part_pulse(
            seen.look, width=seen.width, rail=self.pulse.rail, nominal_inductance=self.spec.inductance
        )
        for flag, kind in ((Flag.PART_OPEN, Kind.OPEN), (Flag.PART_SHORT, Kind.SHORT)):
            if judgement.flags & flag:
                raise BadReading(kind, "part", "; ".join(judgement.texts))
        if seen.look is None:
            raise BadReading(Kind.NO_TRIGGER, "digitizer", "a trigger came, but no pulse is to be seen")
        return seen

    def _learn(self, seen: PulsePoint) -> str | None:
        """Take in a pulse, recorded or not; gives why nothing wider may follow.

        Raises:
            SafeStop: it passed a limit.
        """
        self.night.time = seen.end
        look = seen.look
        assert look is not None
        label, limit = self.night.label(self.part), self.limits
        if look.peak > limit.current:
            raise SafeStop(
                f"{label}: {look.peak:.3g} A in a pulse of {seen.width * 1e6:.4g} us, limit {limit.current:g} A"
            )
        if look.energy > limit.energy:
            raise SafeStop(
                f"{label}: {look.energy * 1e3:.3g} mJ taken by a pulse, limit {limit.energy * 1e3:g} mJ"
            )
        if self.last is None or look.width >= self.last.width:
            self.last = look
        if math.isnan(self.initial_slope):
            self.initial_slope = look.start_slope
        hot = self.night.watch_body(self.part, seen.body_degC, self.body_degC)
        self.body_degC = seen.body_degC
        if look.is_cut_short or look.peak >= self.fixture.trip:
            return f"{look.peak:.3g} A: the fixture ends pulses at about {self.fixture.trip:.3g} A by itself"
        if seen.clipped[1]:
            return "current beyond the digitizer's largest range; wider pulses cannot be predicted"
        return hot

    # ---- a point

    def _measure(self, point: Point, width: float, seeking: str) -> str | None:
        """Measure and record one point; gives why the climb ends with it."""
        seen = self.night.recovery.carry_out(
            Phase.CLIMB,
            partial(
                self._shoot,
                width,
                self.expected,
                repeats=self.pulse.repeats,
                conditioning=self.pulse.conditioning,
            ),
            larger=self.fixture.take_larger,
        )
        why = self._learn(seen)
        look = seen.look
        assert look is not None
        self.history.append(Sought(width, look.peak, look.inductance))
        stopped = judge_stop(look, self.initial_slope, self.stop)
        if self.rule is None:
            why = why or stopped
        elif why is not None or stopped is not None:
            self.ceiling = min(self.ceiling, width)
        if self.rule is not None and why is None:
            proposal = next_point(self.history, self.rule, ceiling=self.ceiling)
            why = None if isinstance(proposal, Next) else proposal.why
        self._record(point, seen, seeking, why)
        return why

    def _record(self, point: Point, seen: PulsePoint, seeking: str, ends: str | None) -> None:
        look, night = seen.look, self.night
        assert look is not None
        full_scale = seen.setup.shunt_range / night.bench.ratings.shunt
        judgement = all_of(
            (
                judge_clipping(*seen.clipped, seen.setup.voltage_range, seen.setup.shunt_range),
                judge_pulse(look, rail=self.pulse.rail, rail_before=seen.rail_before, full_scale=full_scale),
                judge_temperature(
                    seen.body_degC,
                    self.settled.body_degC.get(self.part, seen.body_degC),
                    night.loaded.plan.temperatures.soak.within,
                    is_settled=self.settled.is_settled.get(self.part, True),
                ),
                Judgement(night.recovery.flags),
            )
        )
        row = PointRow(
            plan_index=point.plan_index,
            leg=self.leg,
            part=self.part,
            method="pulse",
            start_time=seen.start,
            end_time=seen.end,
            quality=int(judgement.flags),
            temperature_setpoint=night.setpoint_degC,
            body_temperature=seen.body_degC,
            air_temperature=seen.air_degC,
            pulse_width_setpoint=seen.width,
            rail_voltage_setpoint=self.pulse.rail,
            rail_voltage=seen.rail_before,
            rail_voltage_after=seen.rail_after,
            peak_current=look.peak,
            inductance=look.inductance,
            resistance=self.resistance,
        )
        setting = night.journal.setting(setting_row(seen, night.bench.ratings.shunt))
        captures = [
            CaptureRow(repeat, setting, t, capture.voltage, capture.shunt)
            for repeat, (t, capture) in enumerate(zip(seen.shots.times, seen.shots.captures, strict=True))
        ]
        if seeking:
            night.note("seek", f"{seen.width * 1e6:.4g} us: {seeking}")
        self.last_number = night.record(
            row, judgement, captures, ends=None if ends is None else ("climb_end", ends)
        )

    def _end(self, why: str) -> str:
        """The climb ends before a point was measured; the event belongs to the last one that was."""
        self.night.write_notes()
        self.night.log.event("climb_end", f"{self.night.label(self.part)}: {why}", point=self.last_number)
        return why


def setting_row(seen: PulsePoint, shunt: float) -> SettingRow:
    """How the codes of a point become volts and amperes (by the shunt's nominal resistance)."""
    capture = seen.shots.captures[0]
    return SettingRow(
        samples=int(capture.voltage.size),
        interval=capture.interval,
        first=capture.first,
        dtype=capture.voltage.dtype.name,
        v_scale=capture.voltage_scale,
        v_offset=capture.voltage_offset,
        i_scale=capture.shunt_scale / shunt,
        i_offset=capture.shunt_offset / shunt,
        detail={
            "code_min": capture.code_min,
            "code_max": capture.code_max,
            "voltage_range": seen.setup.voltage_range,
            "shunt_range": seen.setup.shunt_range,
        },
    )


def _seek_rule(night: Night) -> SeekRule | None:
    plan = night.loaded.plan
    assert plan.pulse is not None
    width = plan.pulse.width
    if isinstance(width, tuple):
        return None
    return SeekRule(width.from_, width.to, width.budget, plan.extract.drops, width.until.isat)
