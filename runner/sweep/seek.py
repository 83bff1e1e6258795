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
_PAST = 0.03  # of inductance: so far beyond the largest drop a bracket reaches, so that nobody doubts that it was reached
_COVERAGE = 2.0  # standard uncertainties on each side of an interval
_NEAR = 0.25  # of the crossing: the points that it is found from lie within this of it
_NARROW = 0.08  # a gap not wider than this, relative, is not divided further; repeats beside it bring the noise down
_SIDES = (1.0, -1.0, 0.4, -0.4)  # of it, in turn
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
    """A saturation current from the points so far [A].

    Attributes:
        current: where the inductance has fallen by the drop; x: what must be set for it.
        uncertainty: standard, of `current`.
        reference: the part of it that comes from the reference point.
        gap: between the points on its two sides, relative.
    """

    current: float
    x: float
    uncertainty: float
    reference: float
    gap: float


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
    points = sorted(
        (one for one in history if one.inductance > 0), key=lambda one: (one.x, one.current, one.inductance)
    )
    if len(history) >= rule.budget:
        return Done(f"budget of {rule.budget} points used")
    if not points:
        return Done("no usable point") if history else Next(rule.low, "first point")
    fallen = 1 - min(one.inductance for one in points) / _reference(points)
    if fallen < max(rule.drops) + _PAST and points[-1].x < high * (1 - 1e-9):
        return Next(_step_up(points[-1].x, rule, high), f"bracketing: down by {max(fallen, 0.0):.0%} so far")
    crossings = {drop: find_crossing(points, drop) for drop in rule.drops}
    intervals = {
        drop: 2 * _COVERAGE * crossing.uncertainty / crossing.current
        for drop, crossing in crossings.items()
        if crossing is not None
    }
    drop = max(intervals, key=lambda drop: intervals[drop], default=0.0)
    crossing = crossings.get(drop)
    if crossing is None or intervals[drop] <= rule.until:
        found = f"the intervals at {len(intervals)} of {len(rule.drops)} drops are reached"
        return Done(
            found if len(intervals) == len(rule.drops) else f"{found}; the others lie beyond what may be set"
        )
    why = f"interval at {drop:.0%} is {intervals[drop]:.2%}, {rule.until:.2%} asked for"
    if crossing.reference > 0.7 * crossing.uncertainty:
        return Next(points[0].x, f"reference again: {why}")
    return Next(_close_in(points, crossing, high), f"closing in: {why}")


def find_crossing(points: Sequence[Sought], drop: float) -> Crossing | None:
    """Where the inductance falls past 1 - drop of its reference.

    Args:
        points: sorted by x.
        drop: fraction.

    Returns:
        The crossing, from a parabola through the points about it, or from a straight line where there are too few. Its
        uncertainty: the points' scatter carried through that fit, the scatter of the reference, and half of what parabola
        and line disagree by (a quarter of the gap where there is only the line). None if no point lies beyond.
    """
    current = np.array([one.current for one in points])
    ratio = np.array([one.inductance for one in points]) / _reference(points)
    level = 1 - drop
    below = np.flatnonzero(ratio < level)
    if below.size == 0 or below[0] == 0:
        return None
    right = int(below[0])
    left = right - 1
    gap = float(current[right] - current[left])
    slope = float(ratio[left] - ratio[right]) / gap if gap > 0 else 0.0
    if slope <= 0:
        return None
    share = float(ratio[left] - level) / float(ratio[left] - ratio[right])
    straight = float(current[left]) + share * gap
    scatter = _scatter(current, ratio)
    curved = _parabola(
        current - straight, ratio - level, reach=max(_NEAR * straight, 1.01 * gap), largest=gap
    )
    if curved is None:
        at, spread, model = straight, scatter, gap / 4
    else:
        at, slope, spread = (
            straight + curved.root,
            curved.slope,
            max(scatter, curved.scatter) * curved.leverage,
        )
        model = abs(curved.root) / 2
    references = sum(one.x == points[0].x for one in points)
    reference = scatter * level / references**0.5 / slope
    x = float(np.interp(at, current[left : right + 1], [points[left].x, points[right].x]))
    return Crossing(at, x, math.hypot(spread / slope, reference, model), reference, gap / straight)


@dataclass(frozen=True, slots=True)
class _Curved:
    """A parabola near its root: where that is, how steep it falls there, the points' scatter, the root's leverage."""

    root: float
    slope: float
    scatter: float
    leverage: float


def _parabola(current: FloatArray, ratio: FloatArray, *, reach: float, largest: float) -> _Curved | None:
    """Through the points within `reach` of zero [A]; None if they are too few or its root is farther than `largest`."""
    near = np.abs(current) <= reach
    if np.unique(current[near]).size < _FOR_A_PARABOLA:
        return None
    columns = np.vander(current[near] / reach, 3)
    solution = np.asarray(np.linalg.lstsq(columns, ratio[near], rcond=None)[0], dtype=float)
    root = _root(solution, -largest / reach, largest / reach)
    if root is None:
        return None
    row = np.array([root**2, root, 1.0])
    leverage = float(np.sqrt(row @ np.linalg.pinv(columns.T @ columns) @ row))
    slope = -(2 * solution[0] * root + solution[1]) / reach
    freedom = max(int(np.count_nonzero(near)) - 3, 1)
    scatter = float(np.linalg.norm(columns @ solution - ratio[near])) / freedom**0.5
    return _Curved(root * reach, float(slope), scatter, leverage) if slope > 0 else None


def _root(parabola: FloatArray, low: float, high: float) -> float | None:
    """Root of a parabola between `low` and `high`, by bisection; None if it has the same sign at both ends."""
    first, last = np.polyval(parabola, low), np.polyval(parabola, high)
    if first * last > 0:
        return None
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if np.polyval(parabola, middle) * first > 0 else (low, middle)
    return (low + high) / 2


def _reference(points: Sequence[Sought]) -> float:
    """Inductance at the lowest x, the mean where it was measured more than once [H]."""
    lowest = [one.inductance for one in points if one.x == points[0].x]
    return sum(lowest) / len(lowest)


def _scatter(current: FloatArray, ratio: FloatArray) -> float:
    """Scatter of the points about a smooth curve: residuals of parabolas through five neighbours, their median."""
    found = []
    for first in range(current.size - _FOR_A_PARABOLA + 1):
        part = slice(first, first + _FOR_A_PARABOLA)
        span = float(np.ptp(current[part]))
        if span > 0:
            columns = np.vander((current[part] - current[part][0]) / span, 3)
            solution = np.linalg.lstsq(columns, ratio[part], rcond=None)[0]
            found.append(
                float(np.linalg.norm(columns @ solution - ratio[part])) / (_FOR_A_PARABOLA - 3) ** 0.5
            )
    return max(float(np.median(found)), _LEAST_SCATTER) if found else _UNKNOWN_SCATTER


def _step_up(last: float, rule: SeekRule, high: float) -> float:
    if rule.low <= 0:
        return min(last + (rule.high - rule.low) / _BIAS_STEPS, high)
    return min(last * _GROW, high)


def _close_in(points: Sequence[Sought], crossing: Crossing, high: float) -> float:
    """Into a wide gap about the crossing; about the crossing itself, on both its sides, where the gap is narrow."""
    if crossing.gap <= _NARROW:
        return min(crossing.x * (1 + _NARROW / 2 * _SIDES[len(points) % len(_SIDES)]), high)
    xs = [one.x for one in points]
    right = next(index for index, x in enumerate(xs) if x >= crossing.x)
    low, up = xs[max(right - 1, 0)], xs[right]
    return min(max(crossing.x, low + 0.25 * (up - low)), up - 0.25 * (up - low), high)
