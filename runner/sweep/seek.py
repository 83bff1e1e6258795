"""Where to measure next so that the saturation current becomes known: bracket first, then close in. Pure.

One rule for both methods. `x` is what can be set (pulse width or bias current), each point measured gave a current and
the differential (or incremental) inductance there. Bracketing steps x up by a constant factor until the inductance has
fallen past the largest drop asked for; closing in places the next point, drop by drop, at the crossing predicted from
the points around it, on whichever side of it the gap is wider, until the interval of every crossing is narrow enough or
the budget is used. The same history gives the same next point, so a record tells why each point was taken.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray

_GROW = 1.35  # of x while bracketing: five steps from a quarter of the range to its end
_BIAS_STEPS = 8  # a bias current starts from zero, where no factor helps
_COVERAGE = 2.0  # standard uncertainties on each side of an interval
_NEAR = 7  # points that a crossing is found from
_FOR_A_PARABOLA = 5
_UNKNOWN_SCATTER = 5e-3  # of the inductance, until the points themselves tell
_LEAST_SCATTER = 5e-4


@dataclass(frozen=True, slots=True)
class Sought:
    """One point measured on the way.

    Attributes:
        x: width or bias current that was set [s or A].
        current: peak or bias current [A].
        inductance: at that current [H].
    """

    x: float
    current: float
    inductance: float


@dataclass(frozen=True, slots=True)
class SeekRule:
    """What the plan asks for.

    Attributes:
        low, high: range of x [s or A].
        budget: most points.
        drops: of inductance to find, fractions.
        until: width of the interval of each saturation current, relative, half to each side.
    """

    low: float
    high: float
    budget: int
    drops: tuple[float, ...]
    until: float


@dataclass(frozen=True, slots=True)
class Next:
    """Measure here next."""

    x: float
    why: str


@dataclass(frozen=True, slots=True)
class Done:
    """No more points, and why."""

    why: str


@dataclass(frozen=True, slots=True)
class Crossing:
    """Saturation current from the points so far: where it lies, its standard uncertainty, and x there."""

    current: float
    uncertainty: float
    x: float


def next_point(history: Sequence[Sought], rule: SeekRule, *, ceiling: float = math.inf) -> Next | Done:
    """Place the next point.

    Args:
        history: points so far, in any order.
        rule: what is asked for.
        ceiling: x above this was found not to be allowed (limits, stop rules) [s or A].

    Returns:
        `Next`, or `Done` with the reason.
    """
    high = min(rule.high, ceiling)
    points = sorted((one for one in history if one.inductance > 0), key=lambda one: one.x)
    if len(history) >= rule.budget:
        return Done(f"budget of {rule.budget} points used")
    if not points:
        return Next(rule.low, "first point") if not history else Done("no usable point")
    reference = points[0].inductance
    lowest = min(one.inductance for one in points)
    deepest = max(rule.drops)
    if lowest > (1 - deepest) * reference and points[-1].x < high * (1 - 1e-9):
        return Next(_step_up(points, rule, high), f"bracketing: down by {1 - lowest / reference:.0%} so far")
    widest: tuple[float, Crossing, float] | None = None
    for drop in rule.drops:
        crossing = find_crossing(points, drop)
        if crossing is None:
            continue
        interval = 2 * _COVERAGE * crossing.uncertainty / crossing.current
        if interval > rule.until and (widest is None or interval > widest[0]):
            widest = (interval, crossing, drop)
    if widest is None:
        reached = sum(find_crossing(points, drop) is not None for drop in rule.drops)
        if reached < len(rule.drops):
            return Done(
                f"{reached} of {len(rule.drops)} drops lie below what may be reached; their intervals are met"
            )
        return Done("every interval asked for is reached")
    interval, crossing, drop = widest
    x = _beside(points, crossing.x, high, sequence=len(points))
    return Next(x, f"closing in on {drop:.0%}: interval {interval:.2%}, {rule.until:.2%} asked for")


def find_crossing(points: Sequence[Sought], drop: float) -> Crossing | None:
    """Where the inductance falls past 1 - drop of that of the lowest point.

    Args:
        points: sorted by x.
        drop: fraction.

    Returns:
        The crossing, from a parabola through the points near it (a line through fewer than five). Its uncertainty is the
        points' scatter, carried through the fit, and half of what parabola and line disagree by. None if no crossing.
    """
    current = np.array([one.current for one in points])
    ratio = np.array([one.inductance for one in points]) / points[0].inductance
    level = 1 - drop
    below = np.flatnonzero(ratio < level)
    if below.size == 0 or below[0] == 0:
        return None
    right = int(below[0])
    left = right - 1
    gap = float(current[right] - current[left])
    if gap <= 0:
        return None
    share = float((level - ratio[left]) / (ratio[right] - ratio[left]))
    straight = float(current[left]) + share * gap
    x = points[left].x + share * (points[right].x - points[left].x)
    noise = _scatter(current, ratio)
    near = np.sort(np.argsort(np.abs(current - straight), kind="stable")[:_NEAR])
    slope = float(ratio[right] - ratio[left]) / gap
    if near.size < _FOR_A_PARABOLA or np.ptp(current[near]) <= 0:
        return Crossing(straight, math.hypot(noise / abs(slope), gap / 4), float(x))
    span = float(np.ptp(current[near]))
    scaled = (current[near] - straight) / span
    columns = np.vander(scaled, 3)
    solution = np.asarray(np.linalg.lstsq(columns, ratio[near] - level, rcond=None)[0], dtype=float)
    curved = _root(
        solution, (float(current[left]) - straight) / span, (float(current[right]) - straight) / span
    )
    at = straight if curved is None else straight + curved * span
    leverage = float(np.linalg.pinv(columns.T @ columns)[-1, -1])
    statistical = (
        noise * math.sqrt(leverage + level**2) / abs(slope)
    )  # level: the reference point's own scatter
    model = gap / 4 if curved is None else abs(at - straight) / 2
    return Crossing(at, math.hypot(statistical, model), float(x))


def _root(parabola: FloatArray, low: float, high: float) -> float | None:
    """Root of a parabola between `low` and `high`, by bisection; None if it has the same sign at both ends."""
    first, last = np.polyval(parabola, low), np.polyval(parabola, high)
    if first * last > 0:
        return None
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if np.polyval(parabola, middle) * first > 0 else (low, middle)
    return (low + high) / 2


def _scatter(current: FloatArray, ratio: FloatArray) -> float:
    """Scatter of the points about a smooth curve: residuals of parabolas through five neighbours, their median."""
    if current.size < _FOR_A_PARABOLA + 1:
        return _UNKNOWN_SCATTER
    found = []
    for first in range(current.size - _FOR_A_PARABOLA + 1):
        part = slice(first, first + _FOR_A_PARABOLA)
        span = float(np.ptp(current[part]))
        if span > 0:
            columns = np.vander((current[part] - current[part][0]) / span, 3)
            solution, *_ = np.linalg.lstsq(columns, ratio[part], rcond=None)
            found.append(
                float(np.linalg.norm(columns @ solution - ratio[part])) / (_FOR_A_PARABOLA - 3) ** 0.5
            )
    return max(float(np.median(found)) if found else _UNKNOWN_SCATTER, _LEAST_SCATTER)


def _step_up(points: Sequence[Sought], rule: SeekRule, high: float) -> float:
    last = points[-1].x
    if rule.low <= 0:
        return min(last + (rule.high - rule.low) / _BIAS_STEPS, high)
    return min(last * _GROW, high)


def _beside(points: Sequence[Sought], x: float, high: float, *, sequence: int) -> float:
    """The crossing itself, or, where a point stands there already, the middle of the wider gap beside it."""
    xs = [one.x for one in points]
    right = next((index for index, one in enumerate(xs) if one >= x), len(xs) - 1)
    left = max(right - 1, 0)
    gap = xs[right] - xs[left]
    if gap <= 0.004 * xs[right]:
        # The gap is as narrow as settings make sense: more repeats of its two ends bring the noise down.
        return xs[right] if sequence % 2 else xs[left]
    inside = min(max(x, xs[left] + 0.25 * gap), xs[right] - 0.25 * gap)
    return min(inside, high)
