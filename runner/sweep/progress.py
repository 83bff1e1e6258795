"""How far the run is and how long it will take: the forecast, corrected by what was seen. Pure."""

import math
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Progress:
    """Where a run stands; times are of the bench's clock [s].

    Attributes:
        done, total: points.
        leg, legs: which leg is under way, counted from 1, and how many there are.
        part: label of the part at hand, "" between parts.
        phase: "soak", "pulse", "bias", "safe state" ...
        elapsed, remaining: since the start of this session, and to the end of the run (estimate).
        setpoint_degC, body_degC: NaN where not known.
    """

    done: int
    total: int
    leg: int
    legs: int
    part: str
    phase: str
    elapsed: float
    remaining: float
    setpoint_degC: float = math.nan
    body_degC: float = math.nan


Watch = Callable[[Progress], None]


@dataclass(frozen=True, slots=True)
class Pace:
    """Forecast and what was seen so far; times in s.

    Attributes:
        soak, points: forecast by leg, ramp counted with the soak; 0 for legs that a resume finds done.
        leg: the one under way, from 0.
        is_soaked: its soak is over.
        waited: in its soak so far.
        share: of its points done.
        seen_soak, seen_points: spent on soaks that are over and on points.
    """

    soak: tuple[float, ...]
    points: tuple[float, ...]
    leg: int
    is_soaked: bool
    waited: float
    share: float
    seen_soak: float
    seen_points: float


_TRUST = (
    600.0  # s of forecast that count as already seen, so that the first minutes do not swing the estimate
)
_NEVER_OVER = 0.05  # of a soak that takes longer than forecast is always still to come


def remaining(pace: Pace) -> float:
    """Seconds to the end: the forecast of soaks and of points, each scaled by how it has gone so far."""
    soak_here, points_here = pace.soak[pace.leg], pace.points[pace.leg]
    soak_ahead = sum(pace.soak[pace.leg + 1 :])
    if not pace.is_soaked:
        soak_ahead += max(soak_here - pace.waited, _NEVER_OVER * soak_here)
    points_ahead = sum(pace.points[pace.leg + 1 :]) + (1 - pace.share) * points_here
    soak_behind = sum(pace.soak[: pace.leg]) + (soak_here if pace.is_soaked else 0.0)
    points_behind = sum(pace.points[: pace.leg]) + pace.share * points_here
    return soak_ahead * _correction(pace.seen_soak, soak_behind) + points_ahead * _correction(
        pace.seen_points, points_behind
    )


def _correction(seen: float, forecast: float) -> float:
    return (seen + _TRUST) / (forecast + _TRUST)
