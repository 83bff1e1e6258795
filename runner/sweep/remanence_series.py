"""The remanence study on one part at one temperature: for each polarity and offset field, prepare the core and shoot.

A series is a state prepared and a number of equal shots on it, of which the first is the first pulse after the preparation;
it is one point of the record, its captures in the order of the shots. It is measured whole or again from the preparation: a
shot repeated alone would not be a first one.

Before a series the same pulse, or the widest that the limits let through, is climbed to in its polarity and with its offset
field on, scouting as the pulse method does and with conditioned shots, which carry the most current. So each shot, and each
pulse that demagnetises, is one whose like has been seen to stay inside the limits; currents are judged by their size, in
the direction of the pulse.
"""

import math
from collections.abc import Sequence
from functools import partial

from runner.errors import SafeStop
from runner.plan import Point, demagnetising_widths
from runner.record import CaptureRow, Flag, PointRow
from runner.sweep.climb import setting_row
from runner.sweep.faults import BadReading, GivenUp
from runner.sweep.flags import (
    Judgement,
    all_of,
    judge_clipping,
    judge_part_pulse,
    judge_pulse,
    judge_temperature,
)
from runner.sweep.limits import Halt, first_step, next_step
from runner.sweep.look import Look
from runner.sweep.moves import State
from runner.sweep.night import Night, Settled
from runner.sweep.pulse_point import PulseFixture, PulsePoint
from runner.sweep.retry import Kind, Phase

_CONDITIONING = 2  # pulses before each scouting one: what limits the study is the conditioned core
_AGAINST = 3  # pulses of the other polarity that prepare a series which is not demagnetised
_MOST_SCOUTS = 60  # in one climb
_READ_BACK = 0.1  # of the offset current set, and ...
_READ_BACK_FLOOR = 0.05  # ... A, that the source's own reading may differ


def remanence_series(night: Night, leg: int, part: int, *, settled: Settled, resistance: float) -> None:
    """Carry out the remanence study of one part in one leg; the bench is at rest afterwards.

    Args:
        resistance: of the winding at this temperature as measured [ohm], NaN where nobody measured it.

    Raises:
        SafeStop: a limit was met or a stop asked for.
        GivenUp: the leg or the run must end.
    """
    points = night.to_do(leg, part, "remanence")
    if not points:
        return
    study = _Study(night, leg, part, settled, resistance)
    night.recovery.fresh_point()
    try:
        night.recovery.carry_out(Phase.CLIMB, study.fixture.get_ready)
    except GivenUp as given_up:
        night.absorb(given_up, points)
    else:
        study.go(points)
    night.recovery.carry_out(Phase.CLIMB, night.bench.rest)


class _Study:
    """What the series of one part share.

    Attributes:
        seen: the widest pulse so far by polarity and offset current, on the conditioned core.
        last_sign: polarity of the last pulse fired, 0 before any.
        hot: why the part must not be pulsed again for now, or None.
    """

    def __init__(self, night: Night, leg: int, part: int, settled: Settled, resistance: float) -> None:
        plan = night.loaded.plan
        assert plan.pulse is not None
        assert plan.remanence is not None
        self.night, self.leg, self.part, self.settled = night, leg, part, settled
        self.plan, self.pulse, self.spec = plan.remanence, plan.pulse, plan.parts[part]
        self.resistance = resistance
        self.limits = night.pulse_limits(part)
        nominal = self.spec.resistance_at(night.setpoint_degC)
        self.fixture = PulseFixture(
            night.bench,
            night.loaded,
            part,
            resistance=nominal if math.isnan(resistance) else resistance,
            limit=self.limits.current,
        )
        self.fixture.beside = "offset" if any(self.plan.offset) else ""
        self.seen: dict[tuple[int, float], Look] = {}
        self.last_sign = 0
        self.hot: str | None = None
        self.body_degC = math.nan

    def go(self, points: Sequence[Point]) -> None:
        """Measure the series, in order, until something ends the study."""
        for index, point in enumerate(points):
            self.night.check(self.night.clock.now())
            self.night.recovery.fresh_point()
            self.fixture.fresh_point()
            try:
                why = self._point(point)
            except GivenUp as given_up:
                if not self.night.absorb(given_up, points[index:]):
                    return
                continue
            if why is not None:
                self.night.skip(points[index + 1 :], why)
                return

    def _point(self, point: Point) -> str | None:
        """One series; gives why none may follow."""
        sign, current = point.direction, _plain(point.bias)
        demagnetised = self.plan.demagnetise != "none"
        needed = [(one, 0.0) for one in self.plan.signs] if demagnetised else []
        needed += [(one, current) for one in self.plan.signs if one == sign or not demagnetised]
        for place in needed:
            why = self._climb(*place)
            if why is not None:
                self.night.skip([point], why)
                return self.hot
        carry_out = self.night.recovery.carry_out
        seen, flowing = carry_out(
            Phase.CLIMB, partial(self._series, sign, current), larger=self.fixture.take_larger
        )
        self._learn(seen)
        self._record(point, seen, flowing)
        return self.hot

    # ---- getting there

    def _climb(self, sign: int, current: float) -> str | None:
        """Scouting pulses up to the plan's width, or as far as limits and `stop_at` let them; gives why there is no way."""
        last = self.seen.get((sign, current))
        if last is not None:
            return None
        most = self.pulse.stop_at.current if self.pulse.stop_at else None
        target = min(self.plan.width, self.fixture.longest)
        for _ in range(_MOST_SCOUTS):
            step = (
                first_step(
                    target,
                    limits=self.limits,
                    nominal_inductance=self.spec.inductance,
                    drive=self.pulse.rail,
                    shortest=self.fixture.shortest,
                )
                if last is None
                else next_step(last, target, self.limits, period=self.pulse.rest)
            )
            if isinstance(step, Halt):
                if last is None:
                    return step.why
                self._say(sign, current, f"no wider than {last.width * 1e6:.4g} us: {step.why}")
                break
            expected = (
                step.prediction.current
                if step.prediction
                else self.pulse.rail * step.width / self.spec.inductance
            )
            seen = self.night.recovery.carry_out(
                Phase.CLIMB,
                partial(self._scout, sign, current, step.width, expected),
                larger=self.fixture.take_larger,
            )
            self._learn(seen)
            last = seen.look
            assert last is not None
            if self.hot is not None:
                return self.hot
            if step.width >= target or seen.clipped[1] or last.peak >= self.fixture.trip:
                break
            if most is not None and last.peak >= most:
                break
        assert last is not None
        self.seen[sign, current] = last
        return None

    def _scout(self, sign: int, current: float, width: float, expected: float) -> PulsePoint:
        self._aim(sign, current)
        return self._shoot(width, expected, repeats=1, conditioning=_CONDITIONING)

    def _series(self, sign: int, current: float) -> tuple[PulsePoint, float]:
        """Prepare the core and shoot; the shots, and the current of the offset winding as read [A], NaN without one."""
        how = self._prepare(sign, current)
        flowing = self._aim(sign, current)
        look, shots = self.seen[sign, current], self.plan.shots
        seen = self._shoot(look.width, look.peak, repeats=shots, conditioning=0)
        self._say(sign, current, f"{how}; {shots} shots of {look.width * 1e6:.4g} us")
        return seen, flowing

    def _prepare(self, sign: int, current: float) -> str:
        """Bring the core into the state of a first shot; gives what was done."""
        if self.plan.demagnetise != "none":
            self._aim(sign, 0.0)
            first = min(self.seen[one, 0.0].width for one in self.plan.signs)
            widths = demagnetising_widths(first)
            for index, width in enumerate(widths):
                self._fire(width, sign if index % 2 else -sign)
            return f"demagnetised by {len(widths)} alternating pulses from {first * 1e6:.4g} us"
        if len(self.plan.signs) == 1:
            return "not prepared: the pulses before had the same polarity"
        if self.last_sign != -sign:
            self._aim(-sign, current)
            for _ in range(_AGAINST):
                self._fire(self.seen[-sign, current].width, -sign)
        return "the pulses before had the other polarity"

    def _fire(self, width: float, sign: int) -> None:
        self.last_sign = sign
        self.fixture.fire_unseen(width, sign)

    def _aim(self, sign: int, current: float) -> float:
        """Polarity and offset field for what comes next; the offset current as read [A], NaN where there is none.

        Raises:
            BadReading: the source does not hold its current.
        """
        bench = self.night.bench
        if bench.state is not State.CHARGED:
            self.fixture.get_ready()
        self.fixture.polarity = sign
        if not self.fixture.beside:
            return math.nan
        bench.offset(current)
        if current == 0.0:
            return math.nan
        flowing = bench.bias_source.measure()[0]
        if not abs(flowing - current) <= max(_READ_BACK * abs(current), _READ_BACK_FLOOR):
            what = f"reads {flowing:.4g} A, set to {current:.4g} A; is the offset winding connected?"
            raise BadReading(Kind.STUCK, "bias_source", what)
        return flowing

    def _shoot(self, width: float, expected: float, *, repeats: int, conditioning: int) -> PulsePoint:
        """Measure a width; a part that is open or shorted is a bad reading."""
        self.last_sign = self.fixture.polarity
        seen = self.fixture.measure(width, expected, repeats=repeats, conditioning=conditioning)
        judgement = judge_part_pulse(
            seen.look, width=seen.width, rail=self.pulse.rail, nominal_inductance=self.spec.inductance
        )
        for flag, kind in ((Flag.PART_OPEN, Kind.OPEN), (Flag.PART_SHORT, Kind.SHORT)):
            if judgement.flags & flag:
                raise BadReading(kind, "part", "; ".join(judgement.texts))
        if seen.look is None:
            raise BadReading(Kind.NO_TRIGGER, "digitizer", "a trigger came, but no pulse is to be seen")
        return seen

    # ---- afterwards

    def _learn(self, seen: PulsePoint) -> None:
        """Take in pulses, recorded or not.

        Raises:
            SafeStop: one passed a limit.
        """
        look, label = seen.look, self.night.label(self.part)
        assert look is not None
        if look.peak > self.limits.current:
            raise SafeStop(f"{label}: {look.peak:.3g} A in a pulse, limit {self.limits.current:g} A")
        if look.energy > self.limits.energy:
            raise SafeStop(
                f"{label}: {look.energy * 1e3:.3g} mJ taken by a pulse, limit {self.limits.energy * 1e3:g} mJ"
            )
        self.hot = self.night.watch_body(self.part, seen.body_degC, self.body_degC)
        self.body_degC = seen.body_degC

    def _say(self, sign: int, current: float, text: str) -> None:
        field = f", {current:.4g} A in the offset winding" if current else ""
        way = "forward" if sign > 0 else "reversed"
        self.night.log.event("remanence", f"{self.night.label(self.part)}, {way}{field}: {text}")

    def _record(self, point: Point, seen: PulsePoint, flowing: float) -> None:
        look, night = seen.look, self.night
        assert look is not None
        judgement = all_of(
            (
                judge_clipping(*seen.clipped, seen.setup.voltage_range, seen.setup.shunt_range),
                judge_pulse(
                    look,
                    rail=self.pulse.rail,
                    rail_before=seen.rail_before,
                    full_scale=seen.setup.shunt_range / night.bench.ratings.shunt,
                ),
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
            method="remanence",
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
            bias_current_setpoint=point.bias,
            bias_current=flowing,
            peak_current=point.direction * look.peak,
            inductance=look.inductance,
            resistance=self.resistance,
        )
        setting = night.journal.setting(setting_row(seen, night.bench.ratings.shunt))
        captures = [
            CaptureRow(shot, setting, t, capture.voltage, capture.shunt)
            for shot, (t, capture) in enumerate(zip(seen.shots.times, seen.shots.captures, strict=True))
        ]
        night.record(row, judgement, captures)


def _plain(current: float) -> float:
    """The current of the offset winding [A], 0 where there is none."""
    return 0.0 if math.isnan(current) else current
