"""Averaging repeats: the mean and its noise against the statistics of normal noise, and what a single capture alone can
tell (a repeat unlike the others, clipping, hum, where the pulse begins, the converter's step)."""

import numpy as np
import pytest

from runner.extraction.flags import capture_doubts
from runner.extraction.mean_capture import QUIETEST, Setting, average

SAMPLES, START, STOP = 800, 200, 700  # the pulse stands in samples 200 to 699
INTERVAL = 10e-9
VOLTS, TOP = 12.0, 6.0
NOISE_V, NOISE_I = 8e-3, 5e-3


def setting(**more):
    return Setting(INTERVAL, -START * INTERVAL, **more)


def pulse():
    """A 12 V pulse and a straight ramp of the current to 6 A: closed forms of a linear inductor without resistance."""
    n = np.arange(SAMPLES)
    on = (n >= START) & (n < STOP)
    return np.where(on, VOLTS, 0.0), np.where(on, TOP * (n - START) / (STOP - START), 0.0)


def repeats(count, seed, *, zero_v=0.0, zero_i=0.0):
    """Noisy repeats [count, n] of the pulse, with offsets."""
    generator = np.random.default_rng(seed)
    voltage, current = pulse()
    shape = (count, SAMPLES)
    return (
        voltage + zero_v + NOISE_V * generator.standard_normal(shape),
        current + zero_i + NOISE_I * generator.standard_normal(shape),
    )


# ------------------------------------------------------------------------------------ mean and noise


@pytest.mark.parametrize("count", [1, 2, 8])
def test_mean_is_the_pulse_with_less_noise_and_offsets_gone(count):
    mean = average(*repeats(count, 11, zero_v=0.3, zero_i=-0.05), setting())
    voltage, current = pulse()
    assert mean.repeats == count
    # The mean of r normal samples scatters by σ/√r (GUM 4.2.3); of 800 the sample standard deviation is known to 2.5 %.
    assert np.std(mean.current - current) == pytest.approx(NOISE_I / np.sqrt(count), rel=0.1)
    assert np.std(mean.voltage - voltage) == pytest.approx(NOISE_V / np.sqrt(count), rel=0.1)
    # The offset is the mean of some 190 samples before the pulse: four of its standard deviations.
    assert abs(np.mean(mean.current - current)) < 4 * NOISE_I / np.sqrt(count * 190)


@pytest.mark.parametrize("count", [1, 2, 8])
def test_noise_is_that_of_one_sample_of_one_repeat(count):
    """Whatever the repeats: 0.008 V and 0.005 A were put in. The median of stretches knows it to some 10 %."""
    mean = average(*repeats(count, 12), setting())
    assert mean.voltage_noise == pytest.approx(NOISE_V, rel=0.12)
    assert mean.current_noise == pytest.approx(NOISE_I, rel=0.12)


def test_slow_differences_between_repeats_are_no_noise():
    """A sag of 2 % and an offset of ten noises from repeat to repeat leave the white noise what it is."""
    voltage, current = repeats(8, 13)
    voltage = voltage * (1 - 0.02 * np.arange(8)[:, None] / 7)
    current = current + 10 * NOISE_I * np.linspace(-1, 1, 8)[:, None]
    mean = average(voltage, current, setting())
    assert mean.voltage_noise == pytest.approx(NOISE_V, rel=0.15)
    assert mean.current_noise == pytest.approx(NOISE_I, rel=0.15)


def test_codes_become_volts_and_amperes():
    """value = code·scale + offset, less the value before the pulse: 1000 codes of 12 mV are 12 V whatever the offset."""
    voltage, current = pulse()
    codes = [
        np.rint(values)[None, :].astype(np.int16) for values in (voltage / 12e-3 + 37, current / 5e-3 - 20)
    ]
    mean = average(*codes, setting(v_scale=12e-3, v_offset=-2.0, i_scale=5e-3, i_offset=0.7))
    assert mean.voltage == pytest.approx(voltage, abs=6e-3 + 1e-12)  # half a step
    assert mean.current == pytest.approx(current, abs=2.5e-3 + 1e-12)


def test_what_has_no_noise_at_all_is_weighed_as_a_very_good_converter():
    voltage, current = pulse()
    mean = average(voltage[None, :], current[None, :], setting())
    assert mean.voltage_noise == pytest.approx(QUIETEST * VOLTS)
    assert mean.current_noise == pytest.approx(QUIETEST * current.max())


# ------------------------------------------------------------------------------------ odd repeats


@pytest.mark.parametrize("which", [0, 3, 7])
@pytest.mark.parametrize("what", ["missed", "short", "spike"])
def test_a_repeat_unlike_the_others_is_left_out_and_named(which, what):
    voltage, current = repeats(8, 14)
    if what == "missed":  # the pulser did not fire
        voltage[which], current[which] = voltage[which] * 0, current[which] * 0
    elif what == "short":  # it fired for 90 % of the width
        cut = START + (STOP - START) * 9 // 10
        voltage[which, cut:], current[which, cut:] = 0.0, 0.0
    else:  # mains spike: 3 A for a twentieth of the capture
        current[which, 300:340] += 3.0
    mean = average(voltage, current, setting())
    assert mean.odd == (which,)
    assert mean.repeats == 7
    assert np.abs(mean.current - pulse()[1]).max() < 6 * NOISE_I / np.sqrt(
        7
    )  # 800 normal samples stay within 6 σ
    doubts = capture_doubts(5, mean, None)
    assert any(d.flag == "odd_repeat" and f"repeat {which} " in d.text and d.point == 5 for d in doubts)


@pytest.mark.parametrize("seed", range(20, 40))
def test_noise_alone_makes_no_repeat_odd(seed):
    assert average(*repeats(5, seed), setting()).odd == ()


def test_a_lot_of_repeats_that_differ_is_no_single_odd_one():
    """Half of them missed; or three stand out by their voltage and two others by their current: nobody can say which are
    right, so none is thrown away."""
    voltage, current = repeats(8, 15)
    voltage[:4], current[:4] = 0.0, 0.0
    assert average(voltage, current, setting()).odd == ()
    voltage, current = repeats(8, 15)
    voltage[:3] *= 1.5
    assert average(voltage, current, setting()).odd == (0, 1, 2)
    current[3:5] *= 1.5
    assert average(voltage, current, setting()).odd == ()


# ------------------------------------------------------------------------------------ clipping


@pytest.mark.parametrize("count", [1, 8])
@pytest.mark.parametrize("channel", ["voltage", "current"])
def test_samples_at_the_end_of_the_range_are_not_clean(channel, count):
    voltage, current = repeats(count, 16)
    codes = {"voltage": np.rint(voltage / 12e-3), "current": np.rint(current / 5e-3)}
    top = 900 if channel == "current" else 950  # 4.5 A of 6 A; 11.4 V of 12 V
    codes = {name: np.minimum(values, top).astype(np.int16) for name, values in codes.items()}
    scales = {"v_scale": 12e-3, "i_scale": 5e-3}
    mean = average(codes["voltage"], codes["current"], setting(**scales, code_min=-1000, code_max=top))
    # The current has 1200 codes and is cut at 900, the voltage 1000 and is cut at 950 all along the pulse.
    voltage_cut, current_cut = (codes[name].max(axis=0) >= top for name in ("voltage", "current"))
    assert np.array_equal(mean.clean, ~(voltage_cut | current_cut))
    assert mean.current_clipped is bool(current_cut.any())
    assert mean.voltage_clipped is bool(voltage_cut.any())
    text = " ".join(d.text for d in capture_doubts(0, mean, None) if d.flag == "clipped")
    assert f"{channel} channel cut off" in text


def test_one_clipped_repeat_spoils_the_sample_of_the_mean():
    voltage, current = (np.rint(a / 7e-3).astype(np.int32) for a in repeats(8, 17))
    current[4, 600] = 2047
    mean = average(voltage, current, setting(v_scale=7e-3, i_scale=7e-3, code_max=2047, code_min=-2048))
    assert np.flatnonzero(~mean.clean).tolist() == [600]


def test_the_lower_end_of_the_range_counts_as_well():
    voltage, current = (np.rint(a / 12e-3).astype(np.int32) for a in repeats(2, 18))
    current[0, 450] = -2048
    mean = average(voltage, current, setting(v_scale=12e-3, i_scale=12e-3, code_min=-2048, code_max=2047))
    assert not mean.clean[450]
    assert mean.current_clipped
    assert not mean.voltage_clipped


def test_floats_are_never_clipped():
    mean = average(*repeats(2, 19), setting())
    assert mean.clean.all()
    assert not mean.voltage_clipped
    assert not mean.current_clipped


# ------------------------------------------------------------------------------------ before the pulse


@pytest.mark.parametrize("first", [-START * INTERVAL, 0.0, 3e-3, -1.0])
def test_the_clock_of_a_hand_taken_capture_may_start_anywhere(first):
    """What lies before the voltage's rise is before the pulse, whatever the clock says; where only the rise tells, a
    twentieth of it is kept off, since a voltage may creep up before it jumps."""
    voltage, current = repeats(8, 41, zero_i=0.4)
    if first != -START * INTERVAL:
        voltage[:, START - 6 : START], current[:, START - 6 : START] = 3.0, 1.0
    mean = average(voltage, current, Setting(INTERVAL, first))
    assert 150 <= mean.pretrigger <= START
    in_pulse = (mean.current - pulse()[1])[START:STOP]
    assert np.abs(in_pulse.mean()) < 4 * NOISE_I * np.hypot(1, 1) / np.sqrt(8 * mean.pretrigger)


def test_an_early_voltage_channel_takes_its_guard_off():
    plain = average(*repeats(2, 42), setting()).pretrigger
    assert plain - average(*repeats(2, 42), setting(), guard=25 * INTERVAL).pretrigger in (25, 26)


def test_a_capture_that_begins_with_the_pulse_takes_zeros_on_trust():
    """Nothing to see before it: the setting's own offsets count, and that is said."""
    voltage, current = (values[:, START:] for values in repeats(2, 43))
    mean = average(voltage, current + 0.25, Setting(INTERVAL, 0.0))
    assert mean.pretrigger < 8
    assert np.mean(mean.current - pulse()[1][START:]) == pytest.approx(0.25, abs=1e-3)
    assert [d.flag for d in capture_doubts(0, mean, None) if d.flag == "no_pretrigger"] == ["no_pretrigger"]


# ------------------------------------------------------------------------------------ hum


@pytest.mark.parametrize("seed", range(44, 54))
def test_zeros_of_quiet_repeats_scatter_as_noise_says(seed):
    """Ratio of a sample standard deviation of 8 to the true one: 0.49 to 1.51 at 99 % (chi-square, 7 degrees)."""
    mean = average(*repeats(8, seed), setting())
    assert 0.3 < mean.offset_scatter < 1.9
    assert not any(d.flag == "pickup" for d in capture_doubts(0, mean, None))


def test_mains_pickup_shows_in_the_zeros():
    """50 Hz of 0.1 A, repeats 0.313 s apart: a capture of 8 us sees a constant, another one each time."""
    voltage, current = repeats(8, 55)
    zeros = 0.1 * np.sin(2 * np.pi * 50 * 0.313 * np.arange(8))
    mean = average(voltage, current + zeros[:, None], setting())
    assert mean.offset_scatter == pytest.approx(
        zeros.std(ddof=1) / (NOISE_I / np.sqrt(mean.pretrigger)), rel=0.15
    )
    assert any(d.flag == "pickup" for d in capture_doubts(0, mean, None))


# ------------------------------------------------------------------------------------ is there a pulse?


def test_noise_alone_is_no_pulse():
    for seed in range(56, 76):
        generator = np.random.default_rng(seed)
        voltage, current = (s * generator.standard_normal((4, SAMPLES)) for s in (NOISE_V, NOISE_I))
        assert not average(voltage, current, setting()).has_pulse


def test_a_voltage_without_current_is_no_pulse():
    """An open part: 12 V across it and nothing through it."""
    voltage, current = repeats(4, 77)
    mean = average(voltage, current - pulse()[1], setting())
    assert not mean.has_pulse
    assert any(d.flag == "no_pulse" for d in capture_doubts(0, mean, None))


# ------------------------------------------------------------------------------------ steps


@pytest.mark.parametrize("multiple", [1, 16, 256])
def test_step_of_left_justified_codes_is_found(multiple):
    """A 12-bit converter may deliver multiples of 16 in a 16-bit word: the step is 16 codes."""
    voltage, current = repeats(2, 78)
    codes = [np.rint(values / 2e-3).astype(np.int64) * multiple for values in (voltage, current)]
    mean = average(*codes, setting(v_scale=2e-3 / multiple, i_scale=2e-3 / multiple))
    assert mean.setting.v_step == pytest.approx(2e-3)
    assert mean.setting.i_step == pytest.approx(2e-3)


def test_a_step_that_is_said_is_believed_and_floats_have_none():
    voltage, current = repeats(2, 79)
    assert average(voltage, current, setting()).setting.i_step == 0.0
    assert average(voltage, current, setting(i_step=0.02)).setting.i_step == 0.02
