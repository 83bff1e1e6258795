"""Does the curve have the shape that an inductor's usually has: falling all the way, with one knee?

Two claims, each tested against the curve's own uncertainty, so that noise breaks neither: L_d never rises with
current; and its fall has one steepest place. A core with memory may rise at first; a stepped gap has two plateaus and
two knees. What fails is said, never forced.
"""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.curve import LegCurve

SURE = 4.0  # standard uncertainties
RISE = 0.003  # of L_0: a rise that a practitioner would care about
DIP = 0.25  # the fall must slow down by this share between two knees


@dataclass(frozen=True, slots=True)
class Shape:
    """``rise``: largest certain rise of L_d over an earlier value, as a fraction of L_0 (0: none), and where it peaks
    [A]; ``knees``: currents [A] where the fall is steepest, one for an ordinary part."""

    rise: float
    rise_at: float
    knees: tuple[float, ...]

    @property
    def is_falling(self) -> bool:
        return self.rise == 0.0

    @property
    def has_one_knee(self) -> bool:
        return len(self.knees) < 2


def judge_shape(leg: LegCurve) -> Shape:
    """Test one leg's curve."""
    rise, at = _rise(leg)
    return Shape(rise, at, _knees(leg))


def _rise(leg: LegCurve) -> tuple[float, float]:
    some = np.unique(np.linspace(0, len(leg.current) - 1, 60).astype(np.int64))
    value, slopes = leg.inductance[some], leg.inductance_slopes[some]
    best, at = 0.0, float("nan")
    for k in range(1, len(some)):
        low = int(np.argmin(value[:k]))
        difference = value[k] - value[low]
        direction = slopes[k] - slopes[low]
        u = _u(leg, direction)
        if difference > SURE * u and difference > RISE * value[0] and difference > best:
            best, at = float(difference), float(leg.current[some[k]])
    return best / float(value[0]), at


def _knees(leg: LegCurve) -> tuple[float, ...]:
    """Maxima of the fall −dL/d(log i) that stand out of a dip between them by more than its uncertainty."""
    start = max(2, len(leg.current) // 50)
    step = float(leg.current[1])
    stride = max(1, len(leg.current) // 100)
    some = slice(start, -1, stride)
    fall = (-np.gradient(leg.inductance, step) * leg.current)[some]
    slopes = (-np.gradient(leg.inductance_slopes, step, axis=0) * leg.current[:, None])[some]
    current = leg.current[some]
    tops = _peaks(fall)
    kept: list[int] = []
    for top in tops:
        if not kept:
            kept.append(top)
            continue
        dip = kept[-1] + int(np.argmin(fall[kept[-1] : top + 1]))
        depth = [fall[end] - fall[dip] for end in (kept[-1], top)]
        sure = [depth[k] > SURE * _u(leg, slopes[end] - slopes[dip]) for k, end in enumerate((kept[-1], top))]
        lower = min(fall[kept[-1]], fall[top])
        if all(sure) and min(depth) > DIP * lower:
            kept.append(top)
        elif fall[top] > fall[kept[-1]]:
            kept[-1] = top
    return tuple(float(current[k]) for k in kept)


def _peaks(values: FloatArray) -> list[int]:
    inner = np.flatnonzero((values[1:-1] > values[:-2]) & (values[1:-1] >= values[2:])) + 1
    return [int(k) for k in inner if values[k] > 0.05 * values.max()]


def _u(leg: LegCurve, direction: FloatArray) -> float:
    return float(np.sqrt(max(0.0, float(direction @ leg.covariance @ direction))))
