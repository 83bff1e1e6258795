"""What a pulse may reach: current and energy for each width, before anybody has pulsed the part.

Three currents, and they are not the same claim:

- *linear*: the part keeps its nominal inductance. No real part carries less than this.
- *saturated*: the part keeps its nominal inductance up to its rated current and `SATURATED_SHARE` of it beyond. This is
  the caution shown to whoever stands at the bench: what the longest pulses would do if nobody watched the climb.
- *expected*: the linear current of the widths that the climb will fire. The climb ends at the first width that passes
  `stop_at.current`, so the last one lies up to one step above it.

The limits are judged on the *expected* current, not on the saturated one. A saturated part cannot be excluded before it
has been pulsed, and refusing every plan in which it could pass the limit would refuse every plan that reaches the knee;
in the run each step is taken only where the last capture predicts that it stays inside the limits. A plan that even an
unsaturated part would carry past a limit is refused.
"""

import math
from dataclasses import dataclass

from runner.plan.bench_file import Fixture
from runner.plan.grids import evenly
from runner.plan.plan_file import Part, Plan, Pulse

SATURATED_SHARE = 0.2  # of the nominal inductance; common practice for a caution, no source
KNEE_SHARE = (
    1.4  # of the rated current, where the inductance has fallen by half or more; common practice, no source
)


@dataclass(frozen=True, slots=True)
class WidthForecast:
    """One pulse width on one part.

    Attributes:
        part: label.
        width: [s].
        linear_current, saturated_current: at the end of the pulse [A]; see the module's text.
        energy: taken from the bank by the linear current [J].
        is_fired: False where even on an unsaturated part the climb has stopped before; limits are judged on the others.
        is_likely: False where the climb will probably have stopped, as the knee of a part lies about `KNEE_SHARE` above
            its rated current; times and bytes are counted on the others.
    """

    part: str
    width: float
    linear_current: float
    saturated_current: float
    energy: float
    is_fired: bool
    is_likely: bool


def charging_current(voltage: float, resistance: float, inductance: float, time: float) -> float:
    """Current of an RL circuit `time` [s] after `voltage` [V] was put on it: V/R (1 - exp(-tR/L)) [A]."""
    return -voltage / resistance * math.expm1(-time * resistance / inductance)


def charging_energy(voltage: float, resistance: float, inductance: float, time: float) -> float:
    """Energy that the source gives meanwhile: the integral of V i dt [J]."""
    final = voltage / resistance
    decay = inductance / resistance
    return voltage * final * (time + decay * math.expm1(-time / decay))


def saturated_current(
    voltage: float, resistance: float, inductance: float, time: float, *, knee: float
) -> float:
    """Current of a part that has `inductance` up to `knee` [A] and `SATURATED_SHARE` of it beyond [A]."""
    final = voltage / resistance
    if final <= knee:
        return charging_current(voltage, resistance, inductance, time)
    until = -inductance / resistance * math.log1p(-knee / final)
    if time <= until:
        return charging_current(voltage, resistance, inductance, time)
    left = SATURATED_SHARE * inductance
    return final - (final - knee) * math.exp(-(time - until) * resistance / left)


def planned_widths(pulse: Pulse) -> tuple[float, ...]:
    """The widths of a plan, climbing; of a search, its bounds with its budget between them [s]."""
    if isinstance(pulse.width, tuple):
        return pulse.width
    return evenly(pulse.width.from_, pulse.width.to, pulse.width.budget)


def width_forecasts(plan: Plan, fixture: Fixture, part: Part) -> tuple[WidthForecast, ...]:
    """What each width would do on one part, in climbing order; empty without a pulse section.

    The winding is taken at the coldest leg, where copper lets the most current through.
    """
    if plan.pulse is None:
        return ()
    resistance = part.resistance_at(min(plan.temperatures.at_degC)) + loop_resistance(fixture)
    rail, inductance = plan.pulse.rail, part.inductance
    stop = plan.pulse.stop_at
    last = stop.current if stop and stop.current is not None else math.inf
    likely_last = last
    # A search goes on around the knee until its budget is used, so all of its points are likely.
    if stop and stop.drop is not None and isinstance(plan.pulse.width, tuple):
        likely_last = min(last, KNEE_SHARE * part.rated_current)
    found = []
    before = 0.0
    for width in planned_widths(plan.pulse):
        linear = charging_current(rail, resistance, inductance, width)
        found.append(
            WidthForecast(
                part=part.label,
                width=width,
                linear_current=linear,
                saturated_current=saturated_current(
                    rail, resistance, inductance, width, knee=part.rated_current
                ),
                energy=charging_energy(rail, resistance, inductance, width),
                is_fired=before < last,
                is_likely=before < likely_last,
            )
        )
        before = linear
    return tuple(found)


def study_pulse(plan: Plan, fixture: Fixture, part: Part) -> list[WidthForecast]:
    """The pulse of the remanence study on one part; empty without one."""
    if plan.pulse is None or plan.remanence is None:
        return []
    resistance = part.resistance_at(min(plan.temperatures.at_degC)) + loop_resistance(fixture)
    drive = (plan.pulse.rail, resistance, part.inductance, plan.remanence.width)
    return [
        WidthForecast(
            part=part.label,
            width=plan.remanence.width,
            linear_current=charging_current(*drive),
            saturated_current=saturated_current(*drive, knee=part.rated_current),
            energy=charging_energy(*drive),
            is_fired=True,
            is_likely=True,
        )
    ]


def loop_resistance(fixture: Fixture) -> float:
    """Of the pulse loop without the part [ohm]."""
    bank = fixture.bank.resistance if fixture.bank else 0.0
    shunt = fixture.shunt.resistance.value if fixture.shunt else 0.0
    return bank + shunt + fixture.switch.on_resistance
