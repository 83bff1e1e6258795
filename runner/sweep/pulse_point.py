"""One pulse point: settings, conditioning, captures, readings around them. What comes out is judged elsewhere."""

import math
from dataclasses import dataclass

import numpy as np

from drivers import Capture, DigitizerSetup
from runner.arrays import FloatArray
from runner.plan import LoadedPlan
from runner.sweep.bench import Bench
from runner.sweep.faults import BadReading
from runner.sweep.look import Look, look_at
from runner.sweep.moves import State
from runner.sweep.ranges import choose, next_larger
from runner.sweep.retry import Kind

_SHORTEST_SAMPLES = 40  # of a pulse that can be looked at
_COMPARATOR_DELAY = 100e-9  # s from a current above the fixture's comparator level to an open switch
_SHORTED = 0.05  # of the nominal inductance, left by shorted turns
_LOWEST_TRIP = 0.85  # of the limit; below that the comparator would be in the way of ordinary pulses
_MOST_ENLARGED = 2  # larger ranges tried at one point


@dataclass(frozen=True, slots=True)
class Shots:
    """The captures of one point in volts and amperes, with what came before and after.

    Attributes:
        captures: as fetched.
        times: of each capture's trigger [UTC s].
        voltage, current: [repeats, n]; current by the shunt's nominal resistance.
    """

    captures: tuple[Capture, ...]
    times: tuple[float, ...]
    voltage: FloatArray
    current: FloatArray


@dataclass(frozen=True, slots=True)
class PulsePoint:
    """One width as measured, before it is judged.

    Attributes:
        clipped: samples at the end of the codes, in the voltage and in the shunt channel.
        start, end: UTC [s].
        rail_before, rail_after: bank before the first and right after the last capture [V].
    """

    width: float
    shots: Shots
    look: Look | None
    setup: DigitizerSetup
    clipped: tuple[int, int]
    start: float
    end: float
    rail_before: float
    rail_after: float
    body_degC: float
    air_degC: float


class PulseFixture:
    """The bench wired for pulses on one part.

    Args:
        bench: in whatever state; it is wired and charged when first needed.
        loaded: plan and bench file.
        part: index.
        resistance: of the winding, about [ohm].
        limit: largest current of a pulse on this part [A].

    Attributes:
        polarity: of the pulses, +1 or -1; what is looked at and limited is the current in their direction.
        beside: "offset" connects the offset winding too.
    """

    def __init__(
        self, bench: Bench, loaded: LoadedPlan, part: int, *, resistance: float, limit: float
    ) -> None:
        assert loaded.plan.pulse is not None
        assert loaded.bench.digitizer is not None
        self._bench = bench
        self._pulse = loaded.plan.pulse
        self._digitizer = loaded.bench.digitizer
        self._channel = loaded.plan.parts[part].channel
        self._resistance = resistance
        self._trip = trip_level(limit, rail=self._pulse.rail, inductance=loaded.plan.parts[part].inductance)
        shunt, skew = loaded.bench.fixture.shunt, self._digitizer.calibration.get("skew")
        series = (
            shunt.series_inductance.value
            if shunt is not None and shunt.series_inductance is not None
            else 0.0
        )
        self._shunt_time_constant = series / bench.ratings.shunt
        self._skew = skew.value if skew is not None else 0.0
        self._samples = self._digitizer.samples
        self._pretrigger = max(round(self._digitizer.pretrigger * self._samples), 1)
        self.polarity = 1
        self.beside = ""
        self._least = (0.0, 0.0)  # ranges found too small are not gone back to in this climb
        self._enlarged = 0
        self._clipped = (0, 0)
        self._setup: DigitizerSetup | None = None

    @property
    def shortest(self) -> float:
        """Shortest pulse that can be looked at [s]."""
        return _SHORTEST_SAMPLES * self._digitizer.intervals[0]

    @property
    def longest(self) -> float:
        """Longest pulse whose end is still in the capture [s]."""
        return 0.95 * (self._samples - self._pretrigger) * self._digitizer.intervals[-1]

    @property
    def trip(self) -> float:
        """Current at which the fixture itself ends a pulse [A]; infinite for one that cannot."""
        return self._trip if self._bench.has_comparator else math.inf

    def get_ready(self) -> None:
        """Wired for pulses and charged, from any state."""
        self._bench.rest()
        self._bench.wire(self._channel, "pulse", beside=self.beside)
        self._bench.charge(self._pulse.rail)

    def fresh_point(self) -> None:
        self._enlarged = 0

    def take_larger(self) -> None:
        """Never again the ranges of the last capture in this climb."""
        if self._setup is None:
            return
        ranges = self._digitizer.ranges
        self._least = (
            self._larger(self._setup.voltage_range, ranges.voltage, is_clipped=self._clipped[0] > 0),
            self._larger(self._setup.shunt_range, ranges.shunt, is_clipped=self._clipped[1] > 0),
        )
        self._enlarged += 1

    def measure(
        self, width: float, current: float, *, repeats: int, conditioning: int, start: float | None = None
    ) -> PulsePoint:
        """Pulses of `width` [s] that are expected to reach about `current` [A].

        Args:
            start: the time it is, where that is known [UTC s].

        Raises:
            InstrumentError: an instrument failed.
            BadReading: no trigger came; or a channel clipped and has a larger range.
        """
        bench, rest = self._bench, self._pulse.rest
        if bench.state is not State.CHARGED:
            self.get_ready()
        self._setup = bench.set_pulse(width, self._choose(width, current), self._trip, self.polarity)
        bench.may_fire()
        start = now = bench.clock.now() if start is None else start
        if conditioning:
            now = self._condition(conditioning)
        rail_before = bench.bank()
        shots = self._shoot(repeats, now)
        if shots is None:
            raise BadReading(Kind.NO_TRIGGER, "digitizer", f"no trigger in {self._setup.interval:g} s steps")
        rail_after = bench.bank()
        end = bench.clock.sleep(rest)
        self._clipped = _clipped(shots)
        if any(self._clipped) and self._can_enlarge():
            raise BadReading(Kind.CLIPPED, "digitizer", "clipped in {} and {} samples".format(*self._clipped))
        if _repeats_itself(shots):
            raise BadReading(Kind.STUCK, "digitizer", "two captures are equal to the last bit")
        look = look_at(
            self.polarity * shots.voltage,
            self.polarity * shots.current,
            interval=self._setup.interval,
            pretrigger=self._pretrigger,
            width=width,
            rail=self._pulse.rail,
            resistance=self._resistance,
            shunt_time_constant=self._shunt_time_constant,
            skew=self._skew,
        )
        return PulsePoint(
            width=width,
            shots=shots,
            look=look,
            setup=self._setup,
            clipped=self._clipped,
            start=start,
            end=end,
            rail_before=rail_before,
            rail_after=rail_after,
            body_degC=bench.body(self._channel),
            air_degC=bench.air(),
        )

    def fire_unseen(self, width: float, polarity: int) -> None:
        """One pulse of `width` [s] that nobody records, and a rest; only after a `measure` of one at least as wide."""
        assert self._setup is not None
        self._bench.set_pulse(width, self._setup, self._trip, polarity)
        self._bench.may_fire()
        self._bench.pulser.fire()
        self._bench.clock.sleep(self._pulse.rest)

    def _condition(self, pulses: int) -> float:
        """Pulses that nobody records; gives the time afterwards [UTC s]."""
        for _ in range(pulses):
            self._bench.pulser.fire()
            now = self._bench.clock.sleep(self._pulse.rest)
        return now

    def _shoot(self, repeats: int, now: float) -> Shots | None:
        """Recorded pulses, a rest apart; None if a trigger was missed. `now` is the time at the first [UTC s]."""
        bench = self._bench
        captures, times = [], []
        for shot in range(repeats):
            if shot:
                now = bench.clock.sleep(self._pulse.rest)
            bench.digitizer.arm()
            bench.pulser.fire()
            capture = bench.digitizer.fetch()
            if capture is None:
                return None
            captures.append(capture)
            times.append(now)
        voltage = np.stack([one.voltage * one.voltage_scale + one.voltage_offset for one in captures])
        shunt = np.stack([one.shunt * one.shunt_scale + one.shunt_offset for one in captures])
        return Shots(tuple(captures), tuple(times), voltage, shunt / bench.ratings.shunt)

    def _choose(self, width: float, current: float) -> DigitizerSetup:
        ranges = self._digitizer.ranges
        choice = choose(
            width,
            rail=self._pulse.rail,
            current=current,
            shunt=self._bench.ratings.shunt,
            samples=self._samples,
            pretrigger_samples=self._pretrigger,
            intervals=self._digitizer.intervals,
            voltage_ranges=ranges.voltage,
            shunt_ranges=ranges.shunt,
        )
        return DigitizerSetup(
            samples=self._samples,
            interval=choice.interval,
            pretrigger_samples=self._pretrigger,
            voltage_range=max(choice.voltage_range, self._least[0]),
            shunt_range=max(choice.shunt_range, self._least[1]),
        )

    def _can_enlarge(self) -> bool:
        assert self._setup is not None
        ranges = self._digitizer.ranges
        channels = (
            (self._clipped[0], self._setup.voltage_range, ranges.voltage),
            (self._clipped[1], self._setup.shunt_range, ranges.shunt),
        )
        return self._enlarged < _MOST_ENLARGED and any(
            count and next_larger(size, offered) is not None for count, size, offered in channels
        )

    @staticmethod
    def _larger(size: float, offered: tuple[float, ...], *, is_clipped: bool) -> float:
        return (next_larger(size, offered) or size) if is_clipped else size


def trip_level(limit: float, *, rail: float, inductance: float) -> float:
    """Level of the fixture's comparator [A] that keeps a part which shorts in mid-pulse below `limit` [A].

    Until the switch is open the current of a shorted part goes on rising by rail / inductance times the delay.
    """
    rise = rail * _COMPARATOR_DELAY / (_SHORTED * inductance)
    return max(0.98 * limit - rise, _LOWEST_TRIP * limit)


def _clipped(shots: Shots) -> tuple[int, int]:
    counts = [0, 0]
    for capture in shots.captures:
        for channel, codes in enumerate((capture.voltage, capture.shunt)):
            if codes.max() >= capture.code_max or codes.min() <= capture.code_min:
                counts[channel] += int(
                    np.count_nonzero((codes >= capture.code_max) | (codes <= capture.code_min))
                )
    return counts[0], counts[1]


def _repeats_itself(shots: Shots) -> bool:
    """A digitizer has noise: equal captures are one capture read twice."""
    return any(
        np.array_equal(one.shunt, other.shunt) and np.array_equal(one.voltage, other.voltage)
        for one, other in zip(shots.captures, shots.captures[1:], strict=False)
    )
