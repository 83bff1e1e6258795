"""Is the part at its temperature? A decision on the trace of a leg, pure: readings in, verdict out.

Settled means that for the whole of `hold`: the rest of the drift, at its largest that the readings allow, was inside
`within`, and the readings themselves drifted slower than `drift`. Doubt never ends a soak early: too few readings, a
sensor that stands still while it should move, a sensor that disagrees with the chamber, air still on its way, two time
constants that cannot be told apart yet, all mean waiting, until `give_up` ends it with a verdict that says so.
"""

import enum
from dataclasses import dataclass, field

import numpy as np

from runner.arrays import FloatArray
from runner.sweep.approach import Approach, fit_approach, reading_noise

_FEWEST = 8  # readings before anything is judged
_SHORTEST_WINDOW = 120.0  # s over which a drift can be told from noise
_STILL = 6  # equal readings in a row before a sensor may be called stuck
_AIR_MOVED = 1.0  # K of air, during which a live body sensor must have changed its reading
_AGREE = (
    5.0  # K between where the body ends and the set-point; beyond it one sensor is not where it should be
)
_AIR_NEAR = 3.0  # K, air farther than this from the set-point is still ramping


class Soak(enum.Enum):
    """What to do next."""

    WAIT = "wait"
    SETTLED = "settled"
    GIVE_UP = "give up"


@dataclass(frozen=True, slots=True)
class SoakRule:
    """What settled means; SI, temperatures differences in K.

    Attributes:
        within: largest rest of the drift [K].
        drift: largest slope of the readings [K/s].
        hold: how long both must have held [s].
        give_up: when to stop waiting, counted from `Trace.started` [s].
    """

    within: float
    drift: float
    hold: float
    give_up: float


@dataclass(frozen=True, slots=True)
class Trace:
    """Readings since the set-point was sent.

    Attributes:
        setpoint_degC: of the chamber.
        ramp: how long the chamber needs to get there; waiting is counted from its end [s].
        time: UTC [n] [s]; body_degC: part's sensor [n]; air_degC: chamber air [n].
    """

    setpoint_degC: float
    ramp: float
    time: tuple[float, ...] = ()
    body_degC: tuple[float, ...] = ()
    air_degC: tuple[float, ...] = ()

    def with_sample(self, time: float, body_degC: float, air_degC: float) -> "Trace":
        return Trace(
            self.setpoint_degC,
            self.ramp,
            (*self.time, time),
            (*self.body_degC, body_degC),
            (*self.air_degC, air_degC),
        )


@dataclass(frozen=True, slots=True)
class Verdict:
    """The decision and what it stands on.

    Attributes:
        soak: what to do.
        why: for a person, one line.
        rest: largest rest of the drift believed possible [K], NaN if not judged.
        drift: of the readings over the hold [K/s], NaN if not judged.
        final_degC: where the body will end, NaN if not judged.
        is_stuck: the body sensor does not follow the air.
    """

    soak: Soak
    why: str
    rest: float = field(default=float("nan"))
    drift: float = field(default=float("nan"))
    final_degC: float = field(default=float("nan"))
    is_stuck: bool = False


def judge_soak(rule: SoakRule, trace: Trace) -> Verdict:
    """Decide from the readings so far.

    Args:
        rule: what settled means.
        trace: readings since the set-point was sent; may be empty.

    Returns:
        The verdict; `WAIT` and `GIVE_UP` say in `why` what is missing.
    """
    verdict = _judge(rule, trace)
    if verdict.soak is Soak.WAIT and trace.time:
        waited = trace.time[-1] - trace.time[0] - trace.ramp
        if waited >= rule.give_up:
            return Verdict(
                Soak.GIVE_UP,
                f"not settled {waited / 60:.0f} min after the chamber's ramp: {verdict.why}",
                verdict.rest,
                verdict.drift,
                verdict.final_degC,
                verdict.is_stuck,
            )
    return verdict


def _judge(rule: SoakRule, trace: Trace) -> Verdict:
    window = max(rule.hold, _SHORTEST_WINDOW)
    if len(trace.time) < _FEWEST or trace.time[-1] - trace.time[0] < window:
        return Verdict(Soak.WAIT, "too few readings yet")
    time, body, air = (np.array(series) for series in (trace.time, trace.body_degC, trace.air_degC))
    recent = time >= time[-1] - window
    if abs(air[-1] - trace.setpoint_degC) > _AIR_NEAR:
        return Verdict(Soak.WAIT, f"air at {air[-1]:.1f} degC on its way to {trace.setpoint_degC:g} degC")
    drift = _steepest(time[recent], body[recent])
    stuck = _why_stuck(rule, trace.setpoint_degC, time, body, air)
    if stuck is None and drift > rule.drift:
        return Verdict(Soak.WAIT, f"drifting {drift * 60:.2f} K/min", drift=drift)
    approaches = [
        fit_approach(time, body, air, final_air_degC=final, at=time[-1] - rule.hold)
        for final in _final_airs(rule, trace.setpoint_degC, time[recent], air[recent])
    ]
    approach = max(approaches, key=lambda one: one.rest)

    def verdict(soak: Soak, why: str, *, is_stuck: bool = False) -> Verdict:
        return Verdict(soak, why, approach.rest, drift, approach.final_degC, is_stuck)

    if stuck is not None:
        return verdict(Soak.WAIT, stuck, is_stuck=True)
    if abs(approach.final_degC - trace.setpoint_degC) > max(_AGREE, 3 * rule.within):
        return verdict(Soak.WAIT, f"body heads for {approach.final_degC:.1f} degC, far from the set-point")
    if approach.rest > rule.within:
        return verdict(Soak.WAIT, f"up to {approach.rest:.2f} K of drift to come")
    return verdict(Soak.SETTLED, _settled_why(approach, drift))


def _settled_why(approach: Approach, drift: float) -> str:
    fast, slow = approach.time_constants
    return (
        f"at most {approach.rest:.2f} K to come, drift {drift * 60:.3f} K/min, "
        f"lags of about {fast / 60:.1f} and {slow / 60:.1f} min"
    )


def _final_airs(rule: SoakRule, setpoint: float, time: FloatArray, air: FloatArray) -> tuple[float, ...]:
    """Where the air may stay: where it is, and, while it still moves (overshoot), the set-point as well."""
    here = float(np.mean(air))
    return (here,) if _steepest(time, air) <= rule.drift else (here, setpoint)


def _steepest(time: FloatArray, values: FloatArray) -> float:
    """Larger slope of the two halves, by least squares; one slope over all would hide a curve."""
    half = (time[0] + time[-1]) / 2
    slopes = []
    for part in (time <= half, time >= half):
        if np.count_nonzero(part) >= 3:
            centred = time[part] - time[part].mean()
            slopes.append(abs(float(centred @ values[part] / (centred @ centred))))
    return max(slopes, default=float("inf"))


def _why_stuck(
    rule: SoakRule, setpoint: float, time: FloatArray, body: FloatArray, air: FloatArray
) -> str | None:
    """A sensor that repeats itself to the last digit is stuck if the part must have moved meanwhile.

    Standing still is no fault by itself: a coarse sensor in a settled chamber does just that. So either the air has
    moved while it stood, or the fit to the readings before it stood says that the body was still on its way.
    """
    changes = np.flatnonzero(np.diff(body) != 0)
    first = int(changes[-1]) + 1 if changes.size else 0
    if body.size - first < _STILL:
        return None
    if np.ptp(air[first:]) > _AIR_MOVED:
        return f"body sensor stands at {body[-1]:.2f} degC while the air moved {np.ptp(air[first:]):.1f} K"
    if first >= _FEWEST:
        before = fit_approach(
            time[:first], body[:first], air[:first], final_air_degC=setpoint, at=time[first - 1]
        )
        noise = reading_noise(body[:first])
        travelled = min(before.rest, abs(before.final_degC - body[-1]))
        left = np.exp(-(time[-1] - time[first]) / max(before.time_constants))
        if travelled * (1 - left) > max(0.3 * rule.within, 6 * noise):
            return f"body sensor stands at {body[-1]:.2f} degC with about {travelled:.1f} K still to go"
    return None
