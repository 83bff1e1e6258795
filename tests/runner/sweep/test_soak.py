"""Soak decisions on traces whose truth is known: a body with two lags behind ramped air, in closed form.

For air that ramps from `start` at rate r and then stays, a first-order lag tau is short of the ramp by r tau (1 - e^-t/tau)
and relaxes exponentially afterwards; two lags are a weighted sum (linear systems, any textbook on heat transfer).
"""

import math

import numpy as np
import pytest

from runner.sweep.soak import Soak, SoakRule, Trace, judge_soak

RULE = SoakRule(within=1.0, drift=0.2 / 60, hold=300.0, give_up=7200.0)
RATE = 3.0 / 60  # K/s
SEED = 7


def body_at(
    time: np.ndarray, start: float, end: float, taus: tuple[float, float], share: float
) -> np.ndarray:
    ramp = abs(end - start) / RATE
    rate = math.copysign(RATE, end - start)
    short = np.zeros_like(time)
    for tau, weight in zip(taus, (share, 1 - share), strict=True):
        full = rate * tau * (1 - np.exp(-np.minimum(time, ramp) / tau))
        short += weight * full * np.exp(-np.maximum(time - ramp, 0) / tau)
    return air_at(time, start, end) - short


def air_at(time: np.ndarray, start: float, end: float) -> np.ndarray:
    ramp = abs(end - start) / RATE
    return start + (end - start) * np.minimum(time / ramp, 1.0) if ramp else np.full_like(time, end)


def trace_until(
    end_time: float,
    *,
    start: float = 25.0,
    end: float = 85.0,
    taus: tuple[float, float] = (240.0, 900.0),
    share: float = 0.6,
    offset: float = 0.0,
    noise: float = 0.02,
    stuck_from: float = math.inf,
    resolution: float = 0.0,
    setpoint: float | None = None,
) -> Trace:
    random = np.random.default_rng(SEED)
    time = np.arange(0.0, end_time + 1, 15.0)
    body = body_at(time, start, end, taus, share) + offset + noise * random.standard_normal(time.size)
    if resolution:
        body = np.round(body / resolution) * resolution
    body[time >= stuck_from] = body[np.argmax(time >= stuck_from)]
    air = air_at(time, start, end) + 0.01 * random.standard_normal(time.size)
    wanted = end if setpoint is None else setpoint
    return Trace(wanted, abs(end - start) / RATE, tuple(time), tuple(body), tuple(air))


def settled_at(**about: object) -> float:
    """When the judgement first says settled [s]."""
    for end_time in range(120, 12000, 60):
        if judge_soak(RULE, trace_until(float(end_time), **about)).soak is Soak.SETTLED:  # type: ignore[arg-type]
            return float(end_time)
    return math.inf


@pytest.mark.parametrize(
    ("taus", "share", "start", "end", "offset"),
    [
        ((240.0, 900.0), 0.6, 25.0, 85.0, 0.0),
        ((240.0, 900.0), 0.6, 25.0, 85.0, 0.8),
        ((240.0, 900.0), 0.6, 25.0, -40.0, -0.5),
        ((60.0, 300.0), 0.5, 25.0, 125.0, 0.3),
        ((120.0, 2400.0), 0.85, 25.0, 85.0, 0.0),  # a slow lag with little weight, hidden by the fast one
        ((400.0, 500.0), 0.5, 60.0, 85.0, 0.2),  # two lags that can hardly be told apart
        ((240.0, 900.0), -0.36, 25.0, 85.0, 0.0),  # in series: weights tau1/(tau1-tau2) and tau2/(tau2-tau1)
    ],
)
def test_a_soak_ends_inside_the_band_and_not_much_later(
    taus: tuple[float, float], share: float, start: float, end: float, offset: float
) -> None:
    when = settled_at(taus=taus, share=share, start=start, end=end, offset=offset)
    time = np.arange(0.0, 12000.0, 15.0)
    rest = np.abs(end - body_at(time, start, end, taus, share))
    entered = float(time[np.flatnonzero(rest > RULE.within)[-1]])
    held = when - RULE.hold
    # Never before the truth is inside the band (0.1 K for noise), and within 12 minutes of the earliest that is right.
    assert float(np.interp(held, time, rest)) <= RULE.within + 0.1
    assert when <= entered + RULE.hold + 720.0


def test_a_drifting_part_is_not_settled() -> None:
    assert "drifting" in judge_soak(RULE, trace_until(1500.0)).why
    slowly = judge_soak(RULE, trace_until(3000.0))
    assert slowly.soak is Soak.WAIT
    assert slowly.rest > RULE.within


def test_slow_drift_below_the_drift_limit_does_not_hide_a_long_rest() -> None:
    # 3 K short with a lag of 40 min drifts by 0.075 K/min: inside the drift rule, far outside the band.
    trace = trace_until(3600.0, taus=(60.0, 2400.0), share=0.8)
    truth = 85.0 - body_at(np.array([3600.0]), 25.0, 85.0, (60.0, 2400.0), 0.8)[0]
    verdict = judge_soak(RULE, trace)
    assert truth > 2.0
    assert verdict.drift < RULE.drift
    assert verdict.soak is Soak.WAIT


@pytest.mark.parametrize("stuck_from", [0.0, 300.0, 1200.0, 1500.0])
def test_a_stuck_sensor_never_settles(stuck_from: float) -> None:
    for end_time in range(600, 7200, 600):
        verdict = judge_soak(RULE, trace_until(float(end_time), stuck_from=stuck_from))
        assert verdict.soak is not Soak.SETTLED


def test_a_stuck_sensor_is_named_when_given_up() -> None:
    verdict = judge_soak(RULE, trace_until(1200.0 + 7300.0, stuck_from=600.0))
    assert verdict.soak is Soak.GIVE_UP
    assert verdict.is_stuck
    assert "stands at" in verdict.why


def test_a_coarse_sensor_that_repeats_itself_in_a_settled_chamber_is_not_stuck() -> None:
    assert math.isfinite(settled_at(resolution=0.1, noise=0.0))


def test_a_part_that_is_there_already_needs_only_the_hold() -> None:
    assert settled_at(start=25.0, end=25.0) <= RULE.hold + 60


def test_a_chamber_that_does_not_arrive_is_given_up() -> None:
    verdict = judge_soak(RULE, trace_until(9000.0, end=80.0, setpoint=85.0))
    assert verdict.soak is Soak.GIVE_UP
    assert "on its way" in verdict.why


def test_a_sensor_that_has_come_off_is_given_up() -> None:
    # It reads the room, 60 K from the air, and drifts as the room does.
    random = np.random.default_rng(SEED)
    time = np.arange(0.0, 9000.0, 15.0)
    body = 25.0 + 0.02 * random.standard_normal(time.size)
    air = air_at(time, 25.0, 85.0) + 0.01 * random.standard_normal(time.size)
    verdict = judge_soak(RULE, Trace(85.0, 1200.0, tuple(time), tuple(body), tuple(air)))
    assert verdict.soak is Soak.GIVE_UP


def test_waiting_is_counted_from_the_end_of_the_ramp() -> None:
    rule = SoakRule(within=1e-6, drift=1.0, hold=60.0, give_up=600.0)
    assert judge_soak(rule, trace_until(1200.0 + 590.0)).soak is Soak.WAIT
    assert judge_soak(rule, trace_until(1200.0 + 615.0)).soak is Soak.GIVE_UP


@pytest.mark.parametrize("count", [0, 1, 5])
def test_too_few_readings_wait(count: int) -> None:
    trace = Trace(85.0, 0.0)
    for index in range(count):
        trace = trace.with_sample(15.0 * index, 85.0, 85.0)
    assert judge_soak(RULE, trace).soak is Soak.WAIT


def test_an_overshoot_of_the_air_is_not_taken_for_its_end() -> None:
    # At the top of its overshoot the air stands still for a moment, half a kelvin above where it will be.
    random = np.random.default_rng(SEED)
    time = np.arange(0.0, 1290.0, 5.0)
    air = air_at(time, 25.0, 85.0)
    beyond = np.maximum(time - 1200.0, 0.0)
    air = air + 1.0 * np.sin(2 * np.pi * beyond / 600.0) * np.exp(-beyond / 150.0) * (time > 1200.0)
    body = air - 0.9 + 0.02 * random.standard_normal(time.size)
    rule = SoakRule(within=0.2, drift=0.2 / 60, hold=0.0, give_up=7200.0)
    verdict = judge_soak(rule, Trace(85.0, 1200.0, tuple(time), tuple(body), tuple(air)))
    assert verdict.soak is Soak.WAIT
