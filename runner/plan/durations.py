"""How long a run will take: the chamber's ramps, the soaks, the points. Figures are of the bench's clock.

A soak is forecast from the guess of the part's time constants in the bench file: two lags in parallel behind air that
moves at the chamber's rate, the faster with the larger share. It ends when the rest of the drift has been inside the
band for `hold`. The runner sees readings, not the truth, and waits until they exclude a larger rest: `DOUBT` is what that
costs at the end of a long approach, `LEARNING` what it costs after a small step, where a few minutes of readings cannot
tell a slow lag from none. Both were found by comparing with runs on the mock bench.
"""

import math
from dataclasses import dataclass, replace
from itertools import pairwise

from runner.plan.bench_file import Bench
from runner.plan.currents import width_forecasts
from runner.plan.demagnetise import demagnetising_widths
from runner.plan.grids import CurrentSeek
from runner.plan.plan_file import Part, Plan, Pulse, Soak
from runner.plan.points import ROOM_DEGC, expand

FAST_SHARE = 0.6  # of the lag, carried by the faster time constant; common practice, no source
DOUBT = 0.8  # of the band, inside which the true rest lies by the time the readings show it
LEARNING = 550.0  # s from the set-point to the verdict, without `hold`, where the chamber moved at all
STANDING = 0.5  # K; a chamber that is nearer to its set-point does not move
DISCHARGED = 0.5  # V, below which relays may move
STUDY_SCOUTS = 20  # pulses before each remanence series that climb to its width
SCOUTS = 6  # pulses of the climb that come before or between the widths asked for

# What one message costs [s]: a setting with its confirmation, and each kind of reading. As on the mock bench; real
# instruments differ, but all of this is small beside rests and settling.
MESSAGE = 2e-3
LCR_READING = 100e-3
OHMMETER_READING = 200e-3
THERMOMETER_READING = 20e-3
CHAMBER_READING = 10e-3
RELAY_MESSAGE = 20e-3


@dataclass(frozen=True, slots=True)
class LegTimes:
    """One leg [s]."""

    setpoint_degC: float
    ramp: float
    soak: float
    points: float

    @property
    def total(self) -> float:
        return self.ramp + self.soak + self.points


@dataclass(frozen=True, slots=True)
class Times:
    """A run [s], with its parts and its legs in order."""

    ramp: float
    soak: float
    points: float
    legs: tuple[LegTimes, ...]

    @property
    def total(self) -> float:
        return self.ramp + self.soak + self.points


def forecast_times(plan: Plan, bench: Bench) -> Times:
    """Times of a whole run."""
    rate = bench.chamber.ramp if bench.chamber else 3.0 / 60.0
    air = bench.simulation.ambient_degC if bench.simulation else ROOM_DEGC
    time_constants = sorted(bench.fixture.part_time_constants)
    shares = (FAST_SHARE, 1 - FAST_SHARE) if len(time_constants) == 2 else (1.0,)
    # Of each lag, how far it holds the body behind the air [K].
    lags = [_Lag(tau, share, 0.0) for tau, share in zip(time_constants, shares, strict=True)]
    measuring = point_time(plan, bench)
    legs = []
    for leg in expand(plan).legs:
        step = leg.setpoint_degC - air
        ramp = abs(step) / rate
        lags = [lag.after_ramp(math.copysign(rate, step), ramp) for lag in lags]
        learning = max(LEARNING - ramp, 0.0) if abs(step) > STANDING else 0.0
        soak = _soak_time(plan.temperatures.soak, lags, learning)
        lags = [lag.after(soak + measuring) for lag in lags]
        legs.append(LegTimes(leg.setpoint_degC, ramp, soak, measuring))
        air = leg.setpoint_degC
    return Times(
        ramp=math.fsum(leg.ramp for leg in legs),
        soak=math.fsum(leg.soak for leg in legs),
        points=math.fsum(leg.points for leg in legs),
        legs=tuple(legs),
    )


@dataclass(frozen=True, slots=True)
class _Lag:
    """One time constant of a part [s], its share of the body's temperature, and how far it is behind the air [K]."""

    time_constant: float
    share: float
    behind: float

    def after_ramp(self, rate: float, duration: float) -> "_Lag":
        """After the air has moved at ``rate`` [K/s] for ``duration`` [s]."""
        left = math.exp(-duration / self.time_constant)
        return replace(self, behind=self.behind * left + rate * self.time_constant * (1 - left))

    def after(self, duration: float) -> "_Lag":
        """After the air has stood for ``duration`` [s]."""
        return replace(self, behind=self.behind * math.exp(-duration / self.time_constant))


def _soak_time(soak: Soak, lags: list[_Lag], learning: float) -> float:
    """From the end of the ramp until the soak ends, ``learning`` [s] at least passing before the hold [s]."""

    def is_inside(time: float) -> bool:
        then = [lag.after(time) for lag in lags]
        rest = sum(lag.share * lag.behind for lag in then)
        drift = sum(lag.share * lag.behind / lag.time_constant for lag in then)
        return abs(rest) <= DOUBT * soak.within and abs(drift) <= soak.drift

    low, high = learning, max(soak.give_up, learning)
    if is_inside(low):
        return min(low + soak.hold, soak.give_up)
    if not is_inside(high):
        return soak.give_up
    while high - low > 1.0:
        middle = (low + high) / 2
        low, high = (low, middle) if is_inside(middle) else (middle, high)
    return min(high + soak.hold, soak.give_up)


def point_time(plan: Plan, bench: Bench) -> float:
    """All points of all parts at one leg [s]."""
    study = _remanence_time(plan, bench)
    return sum(_pulse_time(plan, bench, part) + study + _bias_time(plan, bench) for part in plan.parts)


def _remanence_time(plan: Plan, bench: Bench) -> float:
    """All series of one part at one leg [s]."""
    study, pulse = plan.remanence, plan.pulse
    if study is None or pulse is None:
        return 0.0
    one = pulse.rest + 3 * MESSAGE
    train = len(demagnetising_widths(study.width)) if study.demagnetise != "none" else 0
    readings = 12 * MESSAGE + THERMOMETER_READING + CHAMBER_READING
    total = _path_time(bench) + _charge_time(pulse, bench)
    for offset in study.offsets:
        ramps = (
            4 * abs(study.offset_current(offset)) / bench.bias_source.ramp
            if offset and bench.bias_source
            else 0.0
        )
        total += len(study.signs) * (STUDY_SCOUTS * one + (train + study.shots) * one + readings + ramps)
    return total


def _pulse_time(plan: Plan, bench: Bench, part: Part) -> float:
    pulse = plan.pulse
    if pulse is None:
        return 0.0
    widths = sum(row.is_likely for row in width_forecasts(plan, bench.fixture, part))
    readings = 8 * MESSAGE + THERMOMETER_READING + CHAMBER_READING
    one = (pulse.repeats + pulse.conditioning) * (pulse.rest + 3 * MESSAGE) + readings
    return widths * one + SCOUTS * 2 * pulse.rest + _path_time(bench) + _charge_time(pulse, bench)


def _charge_time(pulse: Pulse, bench: Bench) -> float:
    """Charging the bank at the supply's limit, and waiting for its bleeder afterwards [s]."""
    bank, supply = bench.fixture.bank, bench.supply
    if bank is None or supply is None:
        return 0.0
    charge = bank.capacitance * pulse.rail / supply.maximum.current
    return charge + bank.bleed * math.log(max(pulse.rail / DISCHARGED, 1.0))


def _bias_time(plan: Plan, bench: Bench) -> float:
    bias, source = plan.bias, bench.bias_source
    if bias is None or source is None:
        return 0.0
    if isinstance(bias.current, CurrentSeek):
        count, travel = bias.current.budget, 2.0 * bias.current.to
    else:
        steps = (0.0, *bias.current, 0.0)
        count = len(bias.current)
        travel = sum(abs(after - before) for before, after in pairwise(steps))
    readings = LCR_READING + THERMOMETER_READING + CHAMBER_READING + 3 * MESSAGE
    return count * (bias.settle + readings) + travel / source.ramp + _path_time(bench)


def _path_time(bench: Bench) -> float:
    """Connecting a part, and measuring its winding [s]."""
    relays = bench.multiplexer
    moving = relays.settle + 3 * RELAY_MESSAGE if relays else 0.0
    measuring = OHMMETER_READING + moving if bench.ohmmeter else 0.0
    return moving + measuring
