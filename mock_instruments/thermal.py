"""Chamber air and the bodies in it. Air is a closed form of time; bodies follow it exactly for air linear in a step."""

import math
from dataclasses import dataclass

OVERSHOOT_DECAY = 150.0  # s
OVERSHOOT_PERIOD = 600.0  # s
OVERSHOOT_FULL_STEP = 20.0  # K: a smaller step overshoots in proportion
CHAMBER_LEAK = 3600.0  # s: time constant towards ambient with the chamber off


@dataclass(slots=True)
class Air:
    """Air temperature: a ramp at the chamber's own rate, then a decaying swing about the target; off, a slow leak.

    ``since`` is the world time of the last change, ``origin_degC`` the air then, ``target_degC`` true air
    it goes for.
    """

    ambient_degC: float
    ramp: float
    overshoot: float
    on: bool = False
    target_degC: float = 25.0
    since: float = 0.0
    origin_degC: float = 25.0

    def air_degC(self, now: float) -> float:
        elapsed = now - self.since
        if not self.on:
            return self.ambient_degC + (self.origin_degC - self.ambient_degC) * math.exp(
                -elapsed / CHAMBER_LEAK
            )
        step = self.target_degC - self.origin_degC
        travel = abs(step) / self.ramp
        if elapsed < travel:
            return self.origin_degC + math.copysign(self.ramp * elapsed, step)
        beyond = elapsed - travel
        swing = self.overshoot * max(-1.0, min(1.0, step / OVERSHOOT_FULL_STEP))
        turn = math.sin(2.0 * math.pi * beyond / OVERSHOOT_PERIOD)
        return self.target_degC + swing * turn * math.exp(-beyond / OVERSHOOT_DECAY)

    def command(self, now: float, *, on: bool, target_degC: float) -> None:
        """Change what the chamber does from ``now`` on; the same command again changes nothing."""
        if (on, target_degC) == (self.on, self.target_degC):
            return
        self.origin_degC = self.air_degC(now)
        self.since, self.on, self.target_degC = now, on, target_degC


@dataclass(slots=True)
class Body:
    """A part's own temperature as two exponential modes that lag the air, each warmed by its share of the power.

    ``weights`` sum to 1; ``thermal_resistance`` [K/W] is the steady rise per watt, split likewise.
    """

    time_constants: tuple[float, float]
    weights: tuple[float, float]
    thermal_resistance: float
    modes: list[float]

    @property
    def temperature_degC(self) -> float:
        return self.weights[0] * self.modes[0] + self.weights[1] * self.modes[1]

    def step(self, duration: float, air_before: float, air_after: float, power: float) -> None:
        """Follow air that goes linearly from ``air_before`` to ``air_after`` [degC] under constant ``power`` [W]."""
        rate = (air_after - air_before) / duration
        rise = power * self.thermal_resistance
        for k in (0, 1):
            tau = self.time_constants[k]
            fade = math.exp(-duration / tau)
            lag = rate * tau
            self.modes[k] = air_after - lag + rise + (self.modes[k] - air_before + lag - rise) * fade

    def absorb(self, energy: float) -> None:
        """A short heat pulse [J]: each mode jumps by R·E/τ."""
        for k in (0, 1):
            self.modes[k] += energy * self.thermal_resistance / self.time_constants[k]


def relax_bank(
    voltage: float,
    duration: float,
    *,
    capacitance: float,
    bleeder: float,
    supply: tuple[float, float, float] | None,
) -> float:
    """Bank voltage [V] after ``duration`` [s] between pulses, exactly.

    ``supply``: (set voltage, current limit, output resistance) when it is on. Constant current up to where
    the output resistance takes over, then an exponential; above the set voltage, and with the supply off,
    only the bleeder acts.
    """
    bleed = bleeder * capacitance
    if supply is None or supply[1] <= 0.0:
        return voltage * math.exp(-duration / bleed)
    level, limit, output = supply
    if voltage > level:
        until = bleed * math.log(voltage / level) if level > 0.0 else math.inf
        if until >= duration:
            return voltage * math.exp(-duration / bleed)
        voltage, duration = level, duration - until
    corner = level - limit * output
    if voltage < corner:
        final = limit * bleeder
        until = bleed * math.log((final - voltage) / (final - corner)) if final > corner else math.inf
        if until >= duration:
            return final + (voltage - final) * math.exp(-duration / bleed)
        voltage, duration = corner, duration - until
    final = level * bleeder / (bleeder + output)
    tau = capacitance * bleeder * output / (bleeder + output)
    return final + (voltage - final) * math.exp(-duration / tau)
