"""How long a run will take: the chamber's ramps, the soaks, the points. Figures are of the bench's clock.

A soak is forecast from the guess of the part's time constants in the bench file: two lags in parallel, half each, behind
air that moves at the chamber's rate. It ends when the rest of the drift is inside the band and has been for `hold`. The
runner sees readings, not the truth, and waits until the readings exclude a larger rest: `DOUBT` is what that costs.
"""

import math
from dataclasses import dataclass
from itertools import pairwise

from runner.plan.bench_file import Bench
from runner.plan.plan_file import CurrentSeek, Plan, Pulse
from runner.plan.points import ROOM_DEGC, expand

DOUBT = 0.8  # of the band, inside which the true rest lies by the time the readings show it
DISCHARGED = 1.0  # V, below which relays may move

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
    lags = [0.0 for _ in bench.fixture.part_time_constants]
    measuring = point_time(plan, bench)
    legs = []
    for leg in expand(plan).legs:
        ramp = abs(leg.setpoint_degC - air) / rate
        lags = [
            _lag_after_ramp(lag, math.copysign(rate, leg.setpoint_degC - air), ramp, tau)
            for lag, tau in zip(lags, bench.fixture.part_time_constants, strict=True)
        ]
        soak = _soak_time(plan, lags, bench.fixture.part_time_constants)
        lags = [
            lag * math.exp(-(soak + measuring) / tau)
            for lag, tau in zip(lags, bench.fixture.part_time_constants, strict=True)
        ]
        legs.append(LegTimes(leg.setpoint_degC, ramp, soak, measuring))
        air = leg.setpoint_degC
    return Times(
        ramp=math.fsum(leg.ramp for leg in legs),
        soak=math.fsum(leg.soak for leg in legs),
        points=math.fsum(leg.points for leg in legs),
        legs=tuple(legs),
    )


def _lag_after_ramp(lag: float, rate: float, duration: float, tau: float) -> float:
    """How far a body with one time constant is behind the air after a ramp [K]."""
    left = math.exp(-duration / tau)
    return lag * left + rate * tau * (1 - left)


def _soak_time(plan: Plan, lags: list[float], time_constants: tuple[float, ...]) -> float:
    """From the end of the ramp until the soak ends [s]."""
    soak = plan.temperatures.soak

    def is_inside(time: float) -> bool:
        terms = [
            lag * math.exp(-time / tau) / len(lags) for lag, tau in zip(lags, time_constants, strict=True)
        ]
        drift = sum(term / tau for term, tau in zip(terms, time_constants, strict=True))
        return abs(sum(terms)) <= DOUBT * soak.within and abs(drift) <= soak.drift

    low, high = 0.0, soak.give_up
    if is_inside(0.0):
        return soak.hold
    if not is_inside(high):
        return high
    while high - low > 1.0:
        middle = (low + high) / 2
        low, high = (low, middle) if is_inside(middle) else (middle, high)
    return min(high + soak.hold, soak.give_up)


def point_time(plan: Plan, bench: Bench) -> float:
    """All points of all parts at one leg [s]."""
    return len(plan.parts) * (_pulse_time(plan, bench) + _bias_time(plan, bench))


def _pulse_time(plan: Plan, bench: Bench) -> float:
    pulse = plan.pulse
    if pulse is None:
        return 0.0
    settings = 6 * MESSAGE
    readings = 2 * MESSAGE + THERMOMETER_READING + CHAMBER_READING
    one = (pulse.repeats + pulse.conditioning) * (pulse.rest + 3 * MESSAGE) + settings + readings
    return _pulse_points(pulse) * one + _path_time(bench) + _charge_time(pulse, bench)


def _pulse_points(pulse: Pulse) -> int:
    return len(pulse.width) if isinstance(pulse.width, tuple) else pulse.width.budget


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
