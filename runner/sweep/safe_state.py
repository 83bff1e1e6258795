"""The way out of every run: pulser off, bias ramped to zero, rail off, bank discharged, relays open, chamber safe.

In this order, because each step makes the next one harmless. No instrument that fails holds up the ones behind it: a
step is tried, then once more after a reconnect, then the walk goes on and says in the end what could not be confirmed.
The relays are the exception to "goes on": they are moved only once the bias is off and the bank is known to be discharged,
or once the rail is off for so many time constants of the bleeder that it must be. Nothing here raises.

The watchdog walks the same way with sessions of its own, so nothing here may count on what a run remembers.
"""

import contextlib
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from runner.sweep.clock import Clock

DISCHARGED = 0.5  # V, below which a bank counts as discharged
FLOWING = 0.05  # A, below which a bias current counts as zero
_RAMP_STEPS = 8
_LONGEST_RAMP = 2.0  # s for the ramp to zero; outputs must be off soon
_DISCHARGE_LOOKS = 6  # looks at the bank after the computed time, each a fifth of it later


@dataclass(frozen=True, slots=True)
class SafeRule:
    """What the bench file says about getting safe.

    Attributes:
        bleed: time constant of the bank's bleeder [s], 0 where there is no bank.
        highest_rail: most the bank can hold [V].
        ramp: of the bias current [A/s].
        chamber_degC: safe set-point.
    """

    bleed: float
    highest_rail: float
    ramp: float
    chamber_degC: float


@dataclass(frozen=True, slots=True)
class SafeReport:
    """What was done, and what could not be confirmed."""

    done: tuple[str, ...]
    unconfirmed: tuple[str, ...]

    @property
    def is_confirmed(self) -> bool:
        return not self.unconfirmed

    def __str__(self) -> str:
        if self.is_confirmed:
            return "safe state reached: " + ", ".join(self.done)
        return (
            "safe state NOT confirmed: "
            + "; ".join(self.unconfirmed)
            + ". Switch off by hand and check with a meter."
        )


def discharge_time(voltage: float, bleed: float) -> float:
    """How long the bleeder needs from `voltage` [V] to below `DISCHARGED`, with time constant `bleed` [s]."""
    return bleed * math.log(voltage / DISCHARGED) if voltage > DISCHARGED else 0.0


def reach_safe_state(
    roles: Mapping[str, Any],
    rule: SafeRule,
    clock: Clock,
    *,
    bank: float | None = None,
    say: Callable[[str], None] = lambda text: None,
) -> SafeReport:
    """Walk to the safe state.

    Args:
        roles: instruments by role; those that are missing were never there. Asking for one may raise.
        rule: times and set-points.
        clock: for ramps and the bleeder.
        bank: what the bank may be charged to [V], None where nobody knows. A voltmeter alone is not believed when it says
            that there is nothing in the bank: it may be stuck.
        say: told each step as it is done, and how long the bank will take.

    Returns:
        What was done and what could not be confirmed. Never raises for an instrument.
    """
    walk = _Walk(roles, say)
    walk.step("pulser", "pulser off", lambda pulser: pulser.off())
    is_still = walk.step("bias_source", "bias at zero and off", lambda source: _end_bias(source, rule, clock))
    is_off = walk.step("supply", "rail off", lambda supply: supply.off())
    is_discharged = _discharge(walk, rule, clock, rule.highest_rail if bank is None else bank, is_off=is_off)
    if is_discharged and is_still:
        walk.step("multiplexer", "relays open", lambda multiplexer: multiplexer.open_all())
    elif "multiplexer" in roles:
        danger = "bias current may still flow" if is_discharged else "the bank may still be charged"
        walk.unconfirmed.append(f"multiplexer: relays not opened, {danger}")
    walk.step(
        "chamber", f"chamber to {rule.chamber_degC:g} degC", lambda chamber: chamber.set(rule.chamber_degC)
    )
    return SafeReport(tuple(walk.done), tuple(walk.unconfirmed))


class _Walk:
    def __init__(self, roles: Mapping[str, Any], say: Callable[[str], None]) -> None:
        self.roles = roles
        self.say = say
        self.done: list[str] = []
        self.unconfirmed: list[str] = []

    def step(self, role: str, what: str, action: Callable[[Any], None]) -> bool:
        """One step with one instrument, tried twice; True if it was done or there is no such instrument."""
        if role not in self.roles:
            return True
        # Exception, here and below: a fault of ours in one step must not keep the steps behind it from being taken.
        for _ in range(2):
            try:
                action(self.roles[role])
            except Exception as error:
                failure = error
                self.reconnect(role)
            else:
                self.done.append(what)
                self.say(what)
                return True
        # The dialect's own way to the safe state may still work where a set-point is refused.
        try:
            self.roles[role].safe()
        except Exception:
            self.unconfirmed.append(f"{what}: {failure}")
            return False
        self.done.append(f"{what} (by its safe-state messages)")
        self.say(what)
        return True

    def reconnect(self, role: str) -> None:
        # Whether it worked is shown by the next try.
        with contextlib.suppress(Exception):
            self.roles[role].reconnect()


def _end_bias(source: Any, rule: SafeRule, clock: Clock) -> None:
    """Ramp from what flows to zero, so that the part's energy leaves it gently, then off."""
    flowing = abs(source.measure()[0])
    if flowing > FLOWING:
        pause = min(flowing / rule.ramp, _LONGEST_RAMP) / _RAMP_STEPS
        sign = math.copysign(1.0, source.measure()[0])
        for step in range(_RAMP_STEPS - 1, 0, -1):
            source.set(sign * flowing * step / _RAMP_STEPS)
            clock.sleep(pause)
    source.set(0.0)
    if flowing > FLOWING:
        clock.sleep(min(flowing / rule.ramp, _LONGEST_RAMP) / _RAMP_STEPS)
    source.off()


def _discharge(walk: _Walk, rule: SafeRule, clock: Clock, bank: float, *, is_off: bool) -> bool:
    """Wait for the bleeder, from `bank` [V] or from what the supply's voltmeter shows, whichever is more.

    A bank whose voltage nobody can read is empty by then only if the rail behind it `is_off`.
    """
    if "supply" not in walk.roles or rule.bleed <= 0:
        return True
    voltage = _bank_voltage(walk)
    charged = max(rule.highest_rail, bank) if math.isnan(voltage) else max(voltage, bank)
    seconds = discharge_time(charged, rule.bleed)
    if seconds:
        walk.say(f"bank at {voltage:.1f} V, or {charged:.1f} V at most; discharged in {seconds:.0f} s")
        clock.sleep(seconds)
    for _ in range(_DISCHARGE_LOOKS):
        if math.isnan(voltage):
            walk.done.append(
                f"bank left to its bleeder for {seconds:.0f} s, from at most {rule.highest_rail:g} V"
            )
            walk.unconfirmed.append("supply: the bank's voltage could not be read")
            return is_off
        voltage = _bank_voltage(walk)
        if voltage <= DISCHARGED * 1.1:
            walk.done.append("bank discharged")
            return True
        clock.sleep(max(seconds, rule.bleed) / 5)
    if math.isnan(voltage):
        walk.unconfirmed.append("supply: the bank's voltage could not be read")
        return is_off
    walk.unconfirmed.append(f"bank still at {voltage:.1f} V; its bleeder may be open")
    return False


def _bank_voltage(walk: _Walk) -> float:
    """Voltage of the bank [V], NaN where it cannot be read."""
    for _ in range(2):
        # Exception: as in `_Walk.step`.
        with contextlib.suppress(Exception):
            voltage = abs(float(walk.roles["supply"].measure()[0]))
            if math.isfinite(voltage):
                return voltage
        walk.reconnect("supply")
    return math.nan
