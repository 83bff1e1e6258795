"""Every flag: what raises it and what does not."""

import math
from dataclasses import replace

import pytest

from runner.record import Flag
from runner.sweep.flags import (
    judge_bias,
    judge_clipping,
    judge_part_pulse,
    judge_pulse,
    judge_temperature,
    judge_winding,
)
from runner.sweep.look import Look

# A lossless 22 uH part after 10 us at 12 V: 12 V * 10 us / 22 uH = 5.45 A.
GOOD = Look(
    width=10e-6,
    on_time=10e-6,
    peak=5.45,
    end_current=5.45,
    start_current=0.0,
    flux_linkage=120e-6,
    charge=27e-6,
    energy=0.33e-3,
    drive=12.0,
    end_drive=11.9,
    start_slope=1 / 22e-6,
    end_slope=1 / 22e-6,
    slope_error=0.0,
    growth=0.0,
)
RAIL = {"rail": 12.0, "rail_before": 11.99, "full_scale": 20.0}


@pytest.mark.parametrize(
    ("change", "rail_before", "flag"),
    [
        ({}, 11.99, Flag(0)),
        ({}, math.nan, Flag(0)),
        ({"end_drive": 11.0}, 11.99, Flag.BANK_SAGGED),  # 8 % in one pulse
        ({}, 11.0, Flag.BANK_SAGGED),  # not recharged since the last
        ({"start_current": 0.15}, 11.99, Flag(0)),  # an offset of 0.75 % of full scale is the digitizer's own
        ({"start_current": 0.5}, 11.99, Flag.OFFSET_CURRENT),
        ({"start_current": -0.5}, 11.99, Flag.OFFSET_CURRENT),
    ],
)
def test_bank_and_start_of_a_pulse(change: dict[str, float], rail_before: float, flag: Flag) -> None:
    found = judge_pulse(replace(GOOD, **change), rail=12.0, rail_before=rail_before, full_scale=20.0)
    assert found.flags == flag
    assert bool(found.texts) == bool(flag)


@pytest.mark.parametrize(
    ("change", "flag"),
    [
        ({}, Flag(0)),
        ({"peak": 0.1}, Flag.PART_OPEN),  # 0.1 A where 5.45 A would flow
        ({"start_slope": 1 / 1.1e-6}, Flag.PART_SHORT),  # a twentieth of the inductance: turns shorted
        ({"start_slope": 1 / 11e-6}, Flag(0)),  # half of it is a bad part, not a short
    ],
)
def test_a_part_that_opens_or_shorts_shows_in_its_pulse(change: dict[str, float], flag: Flag) -> None:
    found = judge_part_pulse(replace(GOOD, **change), width=10e-6, rail=12.0, nominal_inductance=22e-6)
    assert found.flags == flag


def test_a_pulse_that_nobody_saw_says_nothing_about_the_part() -> None:
    assert judge_part_pulse(None, width=10e-6, rail=12.0, nominal_inductance=22e-6).flags == Flag(0)


@pytest.mark.parametrize(
    ("voltage", "current", "words"),
    [
        (0, 0, ()),
        (3, 0, ("voltage channel",)),
        (0, 7, ("shunt channel",)),
        (1, 1, ("voltage channel", "shunt channel")),
    ],
)
def test_clipping_names_its_channel(voltage: int, current: int, words: tuple[str, ...]) -> None:
    found = judge_clipping(voltage, current, 20.0, 0.2)
    assert found.flags == (Flag.CLIPPED if words else Flag(0))
    assert len(found.texts) == len(words)
    for text, word in zip(found.texts, words, strict=True):
        assert text.startswith(word)


@pytest.mark.parametrize(
    ("body", "is_settled", "flag"),
    [
        (85.4, True, Flag(0)),
        (86.6, True, Flag.TEMPERATURE_DRIFTED),
        (83.4, True, Flag.TEMPERATURE_DRIFTED),
        (85.0, False, Flag.NOT_SETTLED),
    ],
)
def test_temperature(body: float, is_settled: bool, flag: Flag) -> None:
    assert judge_temperature(body, 85.0, 1.0, is_settled=is_settled).flags == flag


@pytest.mark.parametrize(
    ("resistance", "flag"),
    [
        (0.018, Flag(0)),
        (0.014, Flag(0)),
        (0.004, Flag.PART_SHORT),
        (0.2, Flag.PART_OPEN),
        (math.inf, Flag.PART_OPEN),
        (math.nan, Flag(0)),
    ],
)
def test_winding(resistance: float, flag: Flag) -> None:
    assert judge_winding(resistance, 0.018).flags == flag


@pytest.mark.parametrize(
    ("wanted", "flowing", "inductance", "resistance", "flag"),
    [
        (0.0, 0.001, 22e-6, math.nan, Flag(0)),
        (6.0, 6.01, 12e-6, 0.019, Flag(0)),  # half gone at the rated current: that is what is measured
        (6.0, 0.0, math.nan, math.nan, Flag.PART_OPEN),
        (0.0, 0.0, 1.1e-6, math.nan, Flag.PART_SHORT),
        (9.0, 9.0, 1.1e-6, 0.019, Flag(0)),  # deep in saturation little inductance is no short
        (6.0, 6.0, 12e-6, 0.004, Flag.PART_SHORT),
    ],
)
def test_bias(wanted: float, flowing: float, inductance: float, resistance: float, flag: Flag) -> None:
    found = judge_bias(
        wanted=wanted,
        flowing=flowing,
        inductance=inductance,
        resistance=resistance,
        nominal_inductance=22e-6,
        nominal_resistance=0.018,
        rated_current=6.0,
    )
    assert found.flags == flag
