"""Chamber, bodies and the bank between pulses, against closed forms worked here and scipy."""

import math
import time

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from mock_instruments import World, WorldSpec
from mock_instruments.thermal import CHAMBER_LEAK, Air, Body, relax_bank


def body(start=20.0):
    return Body((240.0, 900.0), (0.6, 0.4), 15.0, [start, start])


def test_a_step_of_the_air_is_answered_by_two_exponentials():
    b = body()
    b.step(600.0, 80.0, 80.0, 0.0)
    expected = 80.0 - 60.0 * (0.6 * math.exp(-600 / 240) + 0.4 * math.exp(-600 / 900))
    assert b.temperature_degC == pytest.approx(expected, abs=1e-12)


def test_power_warms_by_the_thermal_resistance_in_the_end():
    b = body()
    b.step(1e6, 20.0, 20.0, 2.0)
    assert b.temperature_degC == pytest.approx(20.0 + 2.0 * 15.0, abs=1e-9)


def test_a_heat_pulse_is_power_for_a_short_time():
    quick, slow = body(), body()
    quick.absorb(5e-3)
    slow.step(1e-3, 20.0, 20.0, 5.0)
    assert quick.temperature_degC == pytest.approx(slow.temperature_degC, rel=1e-8)


@given(
    st.floats(0.1, 3000.0), st.floats(0.05, 0.95), st.floats(-60, 150), st.floats(-60, 150), st.floats(0, 5)
)
def test_a_step_cut_in_two_is_the_step(duration, cut, before, after, power):
    whole, pieces = body(), body()
    whole.step(duration, before, after, power)
    middle = before + (after - before) * cut
    pieces.step(duration * cut, before, middle, power)
    pieces.step(duration * (1 - cut), middle, after, power)
    assert pieces.temperature_degC == pytest.approx(whole.temperature_degC, abs=1e-8)


def test_the_chamber_ramps_at_its_limit_then_overshoots_and_settles():
    chamber = Air(ambient_degC=23.0, ramp=0.05, overshoot=1.0, origin_degC=23.0)
    chamber.command(0.0, on=True, target_degC=83.0)
    assert chamber.air_degC(600.0) == pytest.approx(23.0 + 0.05 * 600.0)
    arrival = 60.0 / 0.05
    assert chamber.air_degC(arrival) == pytest.approx(83.0)
    after = [chamber.air_degC(arrival + s) for s in range(0, 3600, 5)]
    assert 83.2 < max(after) < 84.0
    assert max(after) == max(after[:60])  # in the first swing
    assert after[-1] == pytest.approx(83.0, abs=1e-6)


def test_the_same_command_again_does_not_restart_the_ramp():
    chamber = Air(ambient_degC=23.0, ramp=0.05, overshoot=1.0, origin_degC=23.0)
    chamber.command(0.0, on=True, target_degC=83.0)
    chamber.command(300.0, on=True, target_degC=83.0)
    assert chamber.air_degC(600.0) == pytest.approx(53.0)


def test_a_new_setpoint_ramps_from_where_the_air_is_and_off_leaks_to_ambient():
    chamber = Air(ambient_degC=23.0, ramp=0.05, overshoot=0.0, origin_degC=23.0)
    chamber.command(0.0, on=True, target_degC=83.0)
    chamber.command(400.0, on=True, target_degC=-40.0)
    assert chamber.air_degC(400.0) == pytest.approx(43.0)
    assert chamber.air_degC(500.0) == pytest.approx(38.0)
    chamber.command(500.0, on=False, target_degC=-40.0)
    assert chamber.air_degC(500.0 + CHAMBER_LEAK) == pytest.approx(23.0 + 15.0 * math.exp(-1))


@pytest.mark.parametrize(
    ("start", "supply"),
    [
        (12.0, None),  # bleeding
        (0.0, (12.0, 1.0, 0.05)),  # constant current, then the output resistance
        (11.97, (12.0, 1.0, 0.05)),  # from inside the last stretch
        (15.0, (12.0, 1.0, 0.05)),  # above the set value: bleeds down to it
        (3.0, (0.0, 1.0, 0.05)),  # set to zero: a supply cannot sink
        (5.0, (12.0, 0.0, 0.05)),  # no current allowed
        (0.0, (12.0, 1e-3, 0.05)),  # less than the bleeder takes: never arrives
    ],
)
@pytest.mark.parametrize("duration", [1e-3, 0.05, 3.0, 60.0])
def test_the_bank_between_pulses_agrees_with_scipy(start, supply, duration):
    capacitance, bleeder = 7e-3, 20.0 / 7e-3

    def rate(_, v):
        feed = min(supply[1], max(0.0, (supply[0] - v[0]) / supply[2])) if supply else 0.0
        return [(feed - v[0] / bleeder) / capacitance]

    solved = solve_ivp(
        rate, (0.0, duration), [start], method="LSODA", rtol=1e-10, atol=1e-12, max_step=duration / 20
    )
    found = relax_bank(start, duration, capacitance=capacitance, bleeder=bleeder, supply=supply)
    assert found == pytest.approx(solved.y[0, -1], rel=1e-6, abs=1e-9)


def test_a_body_in_the_chamber_agrees_with_scipy(mapping):
    """Ramp, overshoot and lag together; the world's own 10 s chords cost well under a millikelvin."""
    world = World(WorldSpec.from_mapping(mapping))
    world.set_chamber(on=True, setpoint_degC=85.0)
    chamber = Air(23.0, world.spec.chamber_ramp, world.spec.overshoot, origin_degC=23.0)
    chamber.command(0.0, on=True, target_degC=85.0 - world.spec.chamber_offset)
    times = np.array([600.0, 1300.0, 1500.0, 2400.0])
    solved = solve_ivp(
        lambda t, y: [(chamber.air_degC(t) - y[0]) / 240.0, (chamber.air_degC(t) - y[1]) / 900.0],
        (0.0, 2400.0), [23.0, 23.0], t_eval=times, rtol=1e-9, atol=1e-9, max_step=5.0,
    )  # fmt: skip
    for t, modes in zip(times, solved.y.T, strict=True):
        world.advance(t - world.now)
        assert world.body_degC(1) == pytest.approx(0.6 * modes[0] + 0.4 * modes[1], abs=1e-3)


def test_a_long_night_passes_quickly(mapping):
    world = World(WorldSpec.from_mapping(mapping))
    world.set_chamber(on=True, setpoint_degC=125.0)
    before = time.process_time()
    for _ in range(600):
        world.advance(60.0)
    assert time.process_time() - before < 0.5  # s of processor for ten hours, a stated bound of the design
    assert world.now == pytest.approx(36000.0)
