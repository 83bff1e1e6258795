"""Digits and prefixes against the rounding practice of the GUM and the SI Brochure."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from runner.report.digits import (
    MINUS,
    NOTHING,
    celsius,
    duration,
    fixed,
    interval_text,
    percent,
    quantity,
    round_uncertainty,
    scale_for,
    short,
    signed_percent,
    significant,
)


@pytest.mark.parametrize(
    ("uncertainty", "rounded", "places"),
    [
        # JCGM 100:2008 (GUM) 7.2.6: 10.47 mohm might be rounded up to 11 mohm, but 28.05 kHz down to 28 kHz.
        (10.47, 11, 0),
        (28.05, 28, 0),
        # JCGM 100:2008 7.2.2: u(m_S) = 0.35 mg; 7.2.4: U = 0.79 mg.
        (0.35, 0.35, 2),
        (0.79, 0.79, 2),
        # JCGM 100:2008 H.1: u_c = 31.7 nm is given as 32 nm, U99 = 92.5 nm as 93 nm (2.92 * 32 nm = 93.4 nm -> 93).
        (31.67, 32, 0),
        (93.4, 93, 0),
        # JCGM 100:2008 H.2, table H.4: u(R) = 0.0711 -> 0.071, u(X) = 0.2956 (printed 0.295, from rounded inputs).
        (0.0711, 0.071, 3),
        (0.2956, 0.30, 2),
        # rounding over a power of ten changes the place
        (9.97, 10, 0),
        (0.0996, 0.10, 2),
        (996.0, 1000, -2),
        (123.0, 120, -1),
        (104.0, 110, -1),
        (1.0, 1.0, 1),
    ],
)
def test_an_uncertainty_keeps_two_digits(uncertainty, rounded, places):
    assert round_uncertainty(uncertainty) == (pytest.approx(rounded, rel=1e-12), places)


@pytest.mark.parametrize("bad", [0.0, -1.0, math.nan, math.inf])
def test_an_uncertainty_that_is_none_is_refused(bad):
    with pytest.raises(ValueError, match="positive and finite"):
        round_uncertainty(bad)


@given(st.floats(1e-12, 1e12))
def test_rounding_never_understates_by_more_than_the_limit(uncertainty):
    rounded, places = round_uncertainty(uncertainty)
    assert rounded >= uncertainty * (1 - 0.025) * (1 - 1e-9)
    assert rounded <= uncertainty * 1.1 * (1 + 1e-9)  # 10.25 became 11 at worst
    digits = rounded * 10.0**places
    assert digits == pytest.approx(round(digits), abs=1e-6)
    assert 10 - 1e-6 <= digits <= 99 + 1e-6


@pytest.mark.parametrize(
    ("value", "low", "high", "factor", "expected"),
    [
        # JCGM 100:2008 7.2.6: y = 10.05762 ohm with u_c = 27 mohm is rounded to 10.058 ohm
        (10.05762, 10.05762 - 0.027, 10.05762 + 0.027, 1, ("10.058", "10.031", "10.085", "0.027")),
        # JCGM 100:2008 7.2.4: m_S = (100.02147 +- 0.00079) g
        (100.02147, 100.02068, 100.02226, 1, ("100.02147", "100.02068", "100.02226", "0.00079")),
        # JCGM 100:2008 H.2: R = 127.732 with u = 0.071
        (127.7322, 127.6611, 127.8033, 1, ("127.732", "127.661", "127.803", "0.071")),
        (2.2e-5, 2.19e-5, 2.21e-5, 1e-6, ("22.00", "21.90", "22.10", "0.10")),
        (8.24, 8.2, 8.28, 1, ("8.240", "8.200", "8.280", "0.040")),
        # a lop-sided interval: the wider side gives the place
        (5.0, 4.98, 5.31, 1, ("5.00", "4.98", "5.31", "0.31")),
        (12347.0, 12000.0, 12690.0, 1, ("12350", "12000", "12690", "350")),
    ],
)
def test_value_and_interval_are_rounded_to_one_place(value, low, high, factor, expected):
    text = interval_text(value, low, high, factor=factor)
    assert (text.value, text.low, text.high, text.half_width) == expected


def test_without_an_interval_a_value_gets_four_digits():
    text = interval_text(8.24567, math.nan, math.nan)
    assert (text.value, text.low, text.high) == ("8.246", NOTHING, NOTHING)
    assert interval_text(math.nan, math.nan, math.nan).value == NOTHING
    assert interval_text(5.0, 5.0, 5.0).value == "5.000"  # an interval of no width says nothing about digits


@pytest.mark.parametrize(
    ("numbers", "unit", "factor", "spelling"),
    [
        # SI Brochure, 9th edition, table 7
        ([2.2e-5, 1e-6], "H", 1e-6, "µH"),
        ([0.018], "ohm", 1e-3, "mΩ"),
        ([6.0, 0.1], "A", 1, "A"),
        ([0.99996], "A", 1, "A"),  # would be written 1000 mA with three digits
        ([0.9994], "A", 1e-3, "mA"),
        ([1e5], "Hz", 1e3, "kHz"),
        ([4.7e-9], "F", 1e-9, "nF"),
        ([-3e-12], "s", 1e-12, "ps"),
        ([0.0], "V", 1, "V"),
        ([], "V", 1, "V"),
        ([math.nan, 2e-3], "V", 1e-3, "mV"),
        ([3e20], "V", 1e9, "GV"),
        ([1e-30], "V", 1e-15, "fV"),
    ],
)
def test_a_prefix_puts_the_largest_number_between_1_and_1000(numbers, unit, factor, spelling):
    scale = scale_for(numbers, unit)
    assert scale.factor == pytest.approx(factor)
    assert scale.unit == spelling


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (quantity(2.2e-5, "H"), "22.0 µH"),
        (quantity(math.nan, "H"), NOTHING),
        (short(2.2e-5, "H"), "22 µH"),
        (short(2.5e-6, "s"), "2.5 µs"),
        (short(100.0, "A"), "100 A"),
        (short(math.inf, "A"), NOTHING),
        (significant(9.9996, 4), "10.00"),
        (significant(0.00123456, 3), "0.00123"),
        (significant(123456.0, 3), "123000"),
        (significant(0.0, 3), "0"),
        (fixed(-0.04, 1), "0.0"),
        (fixed(-3.14159, 2), f"{MINUS}3.14"),
        (percent(0.3), "30 %"),
        (percent(0.125), "12.5 %"),
        (percent(0.1 + 0.2), "30 %"),
        (percent(math.nan), NOTHING),
        (signed_percent(0.1234, 1), "+12.3 %"),
        (signed_percent(-0.1234, 1), f"{MINUS}12.3 %"),
        (signed_percent(0.0001, 1), "0.0 %"),
        (signed_percent(math.nan, 1), NOTHING),
        (celsius(-40.0, 0), f"{MINUS}40 °C"),
        (celsius(25.06), "25.1 °C"),
        (duration(33_840), "9 h 24 min"),
        (duration(720), "12 min"),
        (duration(45), "45 s"),
        (duration(3599), "1 h 0 min"),
        (duration(math.nan), NOTHING),
    ],
)
def test_numbers_are_written_as_people_write_them(text, expected):
    assert text == expected
