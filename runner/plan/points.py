"""The points of a plan in the order in which they are measured: temperature outermost, then part, then pulse, then
remanence, then bias.

Widths and currents climb (and bias currents come back down when the plan says so). A sought knee has as many points as
its budget; where they lie is decided while the run goes on.
"""

import math
from dataclasses import dataclass
from typing import Literal

from runner.plan.plan_file import Bias, Plan, Pulse, Remanence

ROOM_DEGC = 23.0  # where a chamber is taken to begin the night


@dataclass(frozen=True, slots=True)
class Leg:
    """All that is done at one chamber temperature."""

    index: int
    setpoint_degC: float


@dataclass(frozen=True, slots=True)
class Point:
    """One pulse width, one remanence series, or one bias current, of one part in one leg.

    Attributes:
        plan_index: place in the whole run, from 0.
        leg, part: indices into the legs and into the plan's parts.
        width: of the pulse [s]; NaN where it does not apply or is sought.
        bias: current [A], of a remanence series that of its offset winding; NaN where it does not apply or is sought.
        sought: the value is decided while the run goes on.
        direction: of the bias current, +1 climbing, -1 coming down; 0 for pulses and sought points. Of a remanence series
            the polarity of its pulses.
        ampere_turns: of the offset field of a remanence series [A], 0 for all others.
    """

    plan_index: int
    leg: int
    part: int
    method: Literal["pulse", "remanence", "bias"]
    width: float
    bias: float
    sought: bool
    direction: Literal[-1, 0, 1]
    ampere_turns: float = 0.0


@dataclass(frozen=True, slots=True)
class Programme:
    """A plan as legs and points, in order."""

    legs: tuple[Leg, ...]
    points: tuple[Point, ...]


def expand(plan: Plan) -> Programme:
    """Legs and points of a plan, in the order in which they are measured."""
    legs = tuple(Leg(index, setpoint) for index, setpoint in enumerate(visited(plan)))
    points: list[Point] = []
    for leg in legs:
        for part in range(len(plan.parts)):
            for step in (*_pulses(plan.pulse), *_series(plan.remanence), *_biases(plan.bias)):
                points.append(Point(len(points), leg.index, part, *step))
    return Programme(legs, tuple(points))


def visited(plan: Plan) -> tuple[float, ...]:
    """The chamber set-points in the order in which they are visited [degC]."""
    written = plan.temperatures.at_degC
    if plan.temperatures.order == "as written":
        return written
    # From the room to the nearer end, then through to the other: no order moves the chamber less.
    climbing = tuple(sorted(written))
    cold_first = abs(ROOM_DEGC - climbing[0]) <= abs(climbing[-1] - ROOM_DEGC)
    return climbing if cold_first else climbing[::-1]


_Step = tuple[Literal["pulse", "remanence", "bias"], float, float, bool, Literal[-1, 0, 1], float]


def _pulses(pulse: Pulse | None) -> list[_Step]:
    if pulse is None:
        return []
    if isinstance(pulse.width, tuple):
        return [("pulse", width, math.nan, False, 0, 0.0) for width in pulse.width]
    return [("pulse", math.nan, math.nan, True, 0, 0.0)] * pulse.width.budget


def _series(study: Remanence | None) -> list[_Step]:
    if study is None:
        return []
    return [
        ("remanence", study.width, study.offset_current(offset), False, sign, offset)
        for offset in study.offsets
        for sign in study.signs
    ]


def _biases(bias: Bias | None) -> list[_Step]:
    if bias is None:
        return []
    if not isinstance(bias.current, tuple):
        return [("bias", math.nan, math.nan, True, 0, 0.0)] * bias.current.budget
    top = bias.current.index(max(bias.current))
    return [
        ("bias", math.nan, current, False, 1 if index <= top else -1, 0.0)
        for index, current in enumerate(bias.current)
    ]
