"""The digitizer's front end: codes, clipping, skew, disturbances."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mock_instruments.circuit import Bank, Loop, Switch, fire
from mock_instruments.flux import FluxLaw
from mock_instruments.sampling import Settings, capture, quantise
from mock_instruments.spec import DigitizerSpec
from mock_instruments.world import Pulse

SETTINGS = Settings(2000, 1e-8, 200, 20.0, 0.2)
CLEAN = DigitizerSpec(bits=16, noise=0.0)


@pytest.fixture
def pulse():
    shot = fire(
        Bank(7e-3, 5e-3, 3e3), Switch(5e-3), Loop(10e-3, 3e-9, 18e-3),
        voltage=12.0, width=12e-6, rising=FluxLaw("gapped", 22e-6, 9.5).at(25.0).still(),
    )  # fmt: skip
    return Pulse(shot, 1, start=100.0, width=12e-6, open_voltage=12.0)


def record(pulse, delay=0.0, **changes):
    spec = DigitizerSpec(**{"bits": 16, "noise": 0.0, **changes})
    return capture(pulse, SETTINGS, spec, delay, np.random.default_rng(3))


@pytest.mark.parametrize("bits", [8, 10, 12, 14, 16])
def test_codes_are_rounded_and_stick_at_both_ends(bits):
    half = 2 ** (bits - 1)
    step = 10.0 / half
    volts = np.array([0.0, 0.49 * step, 0.51 * step, -step, 9.999, 10.0, 1e9, -10.0, -1e9, np.inf])
    expected = [0, 0, 1, -1, min(half - 1, round(9.999 / step)), half - 1, half - 1, -half, -half, half - 1]
    assert list(quantise(volts, 10.0, bits)) == expected


@given(st.integers(4, 16), st.floats(-1.0, 1.0), st.floats(0.01, 100.0))
def test_a_code_is_within_half_a_step_of_its_voltage(bits, fraction, full_scale):
    half = 2 ** (bits - 1)
    volts = fraction * full_scale * (half - 1) / half
    (code,) = quantise(np.array([volts]), full_scale, bits)
    assert abs(code * full_scale / half - volts) <= 0.5 * full_scale / half * (1 + 1e-9)


def test_noise_is_as_large_as_stated(pulse):
    """A uniform rounding error adds 1/12 LSB² to the variance (check: any text on quantisation noise)."""
    codes = record(pulse, bits=12, noise=1.5).shunt[:190]
    assert np.std(codes) == pytest.approx(np.sqrt(1.5**2 + 1 / 12), rel=0.15)  # 190 samples: 3 sigma is 15 %


def test_the_trigger_comes_before_the_switch_closes(pulse):
    first = record(pulse)
    assert np.argmax(first.voltage > 10000) == 200
    late = record(pulse, delay=25e-9)
    assert np.argmax(late.voltage > 10000) == 203  # 25 ns are between two and three samples


def test_the_voltage_channel_is_later_by_the_skew(pulse):
    plain, skewed = record(pulse), record(pulse, skew=20e-9)
    assert np.array_equal(skewed.voltage[2:], plain.voltage[:-2])
    assert np.array_equal(skewed.shunt, plain.shunt)


def test_gains_and_offsets_work_on_the_volts(pulse):
    plain = record(pulse)
    off = record(pulse, voltage_gain=1.01, voltage_offset=0.1, shunt_gain=0.99, shunt_offset=-1e-3)
    at = slice(210, 1390)
    volts, shifted = plain.voltage[at] * 20 / 32768, off.voltage[at] * 20 / 32768
    assert shifted == pytest.approx(1.01 * volts + 0.1, abs=2 * 20 / 32768)
    sense, shifted = plain.shunt[at] * 0.2 / 32768, off.shunt[at] * 0.2 / 32768
    assert shifted == pytest.approx(0.99 * sense - 1e-3, abs=2 * 0.2 / 32768)


def test_hum_and_ringing_are_there_when_asked_for(pulse):
    plain, spoiled = record(pulse), record(pulse, hum=5e-3, ringing=1.0)
    swing = np.abs(spoiled.shunt - plain.shunt) * 0.2 / 32768
    assert swing.max() <= 5.1e-3
    ring = (spoiled.voltage - plain.voltage) * 20 / 32768
    assert np.all(ring[:200] == 0.0)
    assert 0.3 < np.abs(ring[200:260]).max() <= 1.0
    assert np.abs(ring[900:1300]).max() < 1e-2  # it has died away before the switch opens


def test_an_open_part_shows_the_bank_and_no_current():
    flat = capture(Pulse(None, -1, 0.0, 5e-6, 12.0), SETTINGS, CLEAN, 0.0, np.random.default_rng(1))
    assert np.all(flat.shunt == 0)
    assert flat.voltage.min() == -round(12.0 / 20.0 * 32768)
    assert set(np.unique(flat.voltage)) == {0, -round(12.0 / 20.0 * 32768)}


def test_the_voltage_steps_down_to_the_diode_when_the_switch_opens(pulse):
    volts = record(pulse).voltage * 20 / 32768
    assert volts[1390] > 11.0
    assert -3.0 < volts[1410] < -0.7  # V_f plus the drops of the loop
