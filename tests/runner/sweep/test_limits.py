"""Prediction of the next pulse against flux laws in closed form, and the climb that it allows.

Laws: tanh λ = L0 Is tanh(i/Is); sharp λ = L0 i / (1 + (i/Is)^p)^(1/p); soft λ = L0 Is arctan(i/Is); linear. To each the
2 % are added that a winding keeps without its core. A pulse from V volts without losses has λ = V t.
"""

import math
from collections.abc import Callable

import numpy as np
import pytest

from runner.sweep.limits import Halt, PulseLimits, Step, first_step, next_step, predict
from runner.sweep.look import Look, look_at

L0, KNEE, RAIL = 22e-6, 9.0, 12.0
LIMITS = PulseLimits(current=18.0, energy=5e-3)
Law = Callable[[np.ndarray], np.ndarray]


def linear(current: np.ndarray) -> np.ndarray:
    return L0 * current


def tanh_law(current: np.ndarray) -> np.ndarray:
    return L0 * KNEE * np.tanh(current / KNEE)


def soft(current: np.ndarray) -> np.ndarray:
    return L0 * KNEE * np.arctan(current / KNEE)


def sharp(current: np.ndarray, power: float = 6.0) -> np.ndarray:
    return L0 * current / (1 + (current / KNEE) ** power) ** (1 / power)


def sharper(current: np.ndarray) -> np.ndarray:
    return sharp(current, 10.0)


CURRENTS = np.linspace(0.0, 400.0, 400_001)


def current_at(law: Law, flux: np.ndarray) -> np.ndarray:
    """The law, with what the winding keeps without its core, read backwards [A]."""
    return np.interp(flux, 0.98 * law(CURRENTS) + 0.02 * L0 * CURRENTS, CURRENTS)


def look_of(law: Law, width: float, *, samples: int = 1800) -> Look:
    """What a lossless pulse of this law looks like after 200 samples of nothing."""
    interval = 1.25 * width / samples
    time = (np.arange(samples + 200) - 200) * interval
    on = (time >= 0) & (time < width)
    current = np.where(on, current_at(law, RAIL * np.maximum(time, 0.0)), 0.0)
    look = look_at(
        np.where(on, RAIL, 0.0)[None],
        current[None],
        interval=interval,
        pretrigger=200,
        width=width,
        rail=RAIL,
        resistance=0.0,
    )
    assert look is not None
    return look


@pytest.mark.parametrize("law", [linear, tanh_law, soft, sharp, sharper])
@pytest.mark.parametrize("width", [4e-6, 8e-6, 12e-6, 15e-6])
def test_the_worst_case_is_not_exceeded_by_what_comes(law: Law, width: float) -> None:
    last = look_of(law, width)
    truth = float(current_at(law, np.array([RAIL * 1.01 * width]))[0])
    prediction = predict(last, 1.01 * width)
    # 0.2 %: one sample's worth of a knee that turns within the last tenth; the margin to a limit is 3 %.
    assert truth <= 1.002 * prediction.worst_current
    assert prediction.current <= prediction.worst_current
    # One sample of the capture is 0.07 % of the width; the rest is how the bend goes on.
    assert prediction.current == pytest.approx(truth, rel=0.03)


def test_a_look_finds_the_slopes_of_the_law() -> None:
    # tanh: dλ/di = L0 / cosh²(i/Is); i at the end is KNEE * artanh(V t / L0 / Is).
    look = look_of(tanh_law, 12e-6)
    end = float(current_at(tanh_law, np.array([RAIL * 12e-6]))[0])
    assert look.peak == pytest.approx(end, rel=2e-3)  # one sample of 8 ns before the end
    assert 1 / look.start_slope == pytest.approx(L0, rel=0.03)  # mean over the first third
    assert 1 / look.end_slope == pytest.approx(L0 * (0.98 / math.cosh(end / KNEE) ** 2 + 0.02), rel=0.05)
    assert look.flux_linkage == pytest.approx(RAIL * 12e-6, rel=2e-3)


def test_the_energy_taken_from_the_bank_is_rail_times_charge() -> None:
    # Linear: i = V t / L, so the charge is V t² / 2 L.
    look = look_of(linear, 10e-6)
    assert look.energy == pytest.approx(RAIL * RAIL * 10e-6**2 / (2 * L0), rel=5e-3)


@pytest.mark.parametrize("law", [linear, tanh_law, soft, sharp, sharper])
@pytest.mark.parametrize("target", [3e-6, 17e-6, 40e-6])
@pytest.mark.parametrize("limit", [6.0, 10.0, 18.0])
def test_no_climb_passes_the_limit_whatever_the_law(law: Law, target: float, limit: float) -> None:
    limits = PulseLimits(current=limit, energy=1.0)
    step = first_step(target, limits=limits, nominal_inductance=L0, drive=RAIL, shortest=1e-7)
    largest, pulses = 0.0, 0
    while isinstance(step, Step) and pulses < 200:
        look = look_of(law, step.width)
        largest, pulses = max(largest, look.peak), pulses + 1
        if step.width >= target:
            break
        step = next_step(look, target, limits)
    assert largest <= limit
    assert pulses < 80


def test_a_climb_far_below_the_limit_gets_there_in_two_dozen_pulses() -> None:
    step = first_step(12e-6, limits=LIMITS, nominal_inductance=L0, drive=RAIL, shortest=1e-7)
    pulses = 0
    while isinstance(step, Step):
        pulses += 1
        if step.width >= 12e-6:
            break
        step = next_step(look_of(linear, step.width), 12e-6, LIMITS)
    assert isinstance(step, Step)
    assert pulses <= 25


def test_the_first_pulse_is_safe_for_a_part_with_a_fiftieth_of_its_inductance() -> None:
    step = first_step(5e-6, limits=LIMITS, nominal_inductance=L0, drive=RAIL, shortest=1e-7)
    assert isinstance(step, Step)
    assert RAIL * step.width / (L0 / 50) <= LIMITS.current
    assert RAIL * RAIL * step.width**2 / (2 * L0 / 50) <= LIMITS.energy


def test_a_bench_that_cannot_show_a_short_enough_pulse_does_not_begin() -> None:
    step = first_step(50e-6, limits=LIMITS, nominal_inductance=1e-6, drive=100.0, shortest=1e-6)
    assert isinstance(step, Halt)


def test_energy_and_mean_power_end_a_climb_as_well() -> None:
    last = look_of(linear, 12e-6)
    assert isinstance(next_step(last, 14e-6, PulseLimits(1e3, 1.01 * last.energy)), Halt)
    power = last.energy / 0.5
    assert isinstance(next_step(last, 14e-6, PulseLimits(1e3, 1.0, mean_power=power), period=0.5), Halt)
    assert isinstance(next_step(last, 14e-6, PulseLimits(1e3, 1.0, mean_power=2 * power), period=0.5), Step)


def test_the_reason_names_the_limit() -> None:
    halt = next_step(look_of(sharp, 16e-6), 20e-6, PulseLimits(current=11.5, energy=1.0))
    assert isinstance(halt, Halt)
    assert "11.5 A" in halt.why
