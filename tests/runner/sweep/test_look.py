"""A look at captures that are not as they should be."""

import numpy as np

from runner.sweep.look import look_at

ABOUT = {"interval": 1e-8, "pretrigger": 200, "width": 1e-5, "rail": 12.0, "resistance": 0.0}


def test_nothing_is_seen_where_nothing_happened() -> None:
    assert look_at(np.zeros((2, 2000)), np.zeros((2, 2000)), **ABOUT) is None


def test_a_pulse_of_a_few_samples_is_not_looked_at() -> None:
    voltage = np.zeros((1, 2000))
    voltage[0, 200:205] = 12.0
    assert look_at(voltage, voltage / 10, **ABOUT) is None


def test_offsets_of_both_channels_are_taken_off() -> None:
    time = (np.arange(2000) - 200) * 1e-8
    on = (time >= 0) & (time < 1e-5)
    voltage, current = np.where(on, 12.0, 0.0), np.where(on, 12.0 / 22e-6 * time, 0.0)
    plain = look_at(voltage[None], current[None], **ABOUT)
    shifted = look_at(voltage[None] + 0.3, current[None] - 0.2, **ABOUT)
    assert plain is not None
    assert shifted is not None
    assert abs(shifted.peak - plain.peak) < 1e-9
    assert abs(shifted.flux_linkage - plain.flux_linkage) < 1e-12
    assert abs(shifted.start_current - plain.start_current + 0.2) < 1e-9


def test_the_peak_is_the_largest_of_all_repeats() -> None:
    time = (np.arange(2000) - 200) * 1e-8
    on = (time >= 0) & (time < 1e-5)
    voltage = np.where(on, 12.0, 0.0)
    current = np.where(on, 12.0 / 22e-6 * time, 0.0)
    look = look_at(np.stack([voltage] * 2), np.stack([current, 1.2 * current]), **ABOUT)
    assert look is not None
    assert look.peak == (1.2 * current).max()


def test_a_shunt_with_inductance_shows_no_current_that_is_not_there() -> None:
    # i = V t / L; the shunt shows i + tau V / L from the first instant of the pulse on.
    time = (np.arange(2000) - 200) * 1e-8
    on = (time >= 0) & (time < 1e-5)
    rate, tau = 12.0 / 22e-6, 0.3e-6
    voltage, current = np.where(on, 12.0, 0.0), np.where(on, rate * time, 0.0)
    shown = current + np.where(on, tau * rate, 0.0)
    look = look_at(voltage[None], shown[None], shunt_time_constant=tau, **ABOUT)
    assert look is not None
    assert abs(look.peak - current.max()) < 1.5 * rate * 1e-8  # a sample and a half
    assert abs(1 / look.start_slope - 22e-6) < 0.05e-6


def test_a_voltage_channel_that_is_late_is_brought_back() -> None:
    time = (np.arange(2000) - 200) * 1e-8
    on = (time >= 0) & (time < 1e-5)
    voltage = np.where(on, 12.0, 0.0)
    current = np.where(on, 12.0 / 22e-6 * time, 12.0 / 22e-6 * 1e-5 * np.exp(-(time - 1e-5) / 1e-4)) * (
        time >= 0
    )
    look = look_at(np.roll(voltage, 5)[None], current[None], skew=5e-8, **ABOUT)
    straight = look_at(voltage[None], current[None], **ABOUT)
    assert look is not None
    assert straight is not None
    assert look.end_slope == straight.end_slope


def test_a_pulse_that_the_fixture_ended_is_cut_short() -> None:
    time = (np.arange(2000) - 200) * 1e-8
    for width, is_cut in ((1e-5, False), (0.98e-5, False), (0.9e-5, True)):
        on = (time >= 0) & (time < width)
        look = look_at(np.where(on, 12.0, 0.0)[None], np.where(on, 5e5 * time, 0.0)[None], **ABOUT)
        assert look is not None
        assert look.is_cut_short is is_cut
