"""Values with units. Expected numbers: SI prefixes (BIPM SI brochure), K = degC + 273.15, degF = 1.8 degC + 32."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from runner.plan.quantity import (
    AMPERE_TURNS,
    AREA,
    CAPACITANCE,
    CURRENT,
    CURRENT_RATE,
    DIFFERENCE,
    DRIFT,
    DURATION,
    ENERGY,
    FACTOR,
    FRACTION,
    FREQUENCY,
    INDUCTANCE,
    KINDS,
    POWER,
    RESISTANCE,
    TEMPCO,
    TEMPERATURE,
    THERMAL_RESISTANCE,
    TIME,
    VOLTAGE,
    Kind,
    read_quantity,
    shown,
)


@pytest.mark.parametrize(
    ("written", "kind", "value"),
    [
        ("40 us", TIME, 40e-6),
        ("40us", TIME, 40e-6),
        ("40 \u00b5s", TIME, 40e-6),
        ("40 \u03bcs", TIME, 40e-6),
        ("1e-3 s", TIME, 1e-3),
        (".5 ms", TIME, 0.5e-3),
        ("+5 ns", TIME, 5e-9),
        ("2 h", DURATION, 7200.0),
        ("5 min", DURATION, 300.0),
        ("12 V", VOLTAGE, 12.0),
        ("50 mV", VOLTAGE, 0.05),
        ("6 A", CURRENT, 6.0),
        ("22 uH", INDUCTANCE, 22e-6),
        ("18 mohm", RESISTANCE, 0.018),
        ("18 m\u03a9", RESISTANCE, 0.018),
        ("18 m\u2126", RESISTANCE, 0.018),
        ("7 mF", CAPACITANCE, 7e-3),
        ("5 mJ", ENERGY, 5e-3),
        ("5 W", POWER, 5.0),
        ("100 kHz", FREQUENCY, 1e5),
        ("1 MHz", FREQUENCY, 1e6),
        ("-40 degC", TEMPERATURE, -40.0),
        ("\u221240 \u00b0C", TEMPERATURE, -40.0),
        ("25\u00b0C", TEMPERATURE, 25.0),
        ("298.15 K", TEMPERATURE, 25.0),
        ("212 degF", TEMPERATURE, 100.0),
        ("-40 degF", TEMPERATURE, -40.0),
        ("1 K", DIFFERENCE, 1.0),
        ("500 mK", DIFFERENCE, 0.5),
        ("0.2 K/min", DRIFT, 0.2 / 60),
        ("3 degC/min", DRIFT, 0.05),
        ("5 A/s", CURRENT_RATE, 5.0),
        ("30 %", FRACTION, 0.3),
        ("30%", FRACTION, 0.3),
        ("200 ppm", FRACTION, 2e-4),
        ("20 ppm/K", TEMPCO, 20e-6),
        ("0.4 %/K", TEMPCO, 4e-3),
        ("-1.5e-3 1/K", TEMPCO, -1.5e-3),
        ("52 mm^2", AREA, 52e-6),
        ("52 mm\u00b2", AREA, 52e-6),
        ("0.52 cm^2", AREA, 52e-6),
        ("15 K/W", THERMAL_RESISTANCE, 15.0),
        ("-20 A turns", AMPERE_TURNS, -20.0),
        (1, FACTOR, 1.0),
        ("1.0005", FACTOR, 1.0005),
        ("100.05 %", FACTOR, 1.0005),
    ],
)
def test_values_come_out_in_si(written: object, kind: Kind, value: float) -> None:
    assert read_quantity(written, kind) == pytest.approx(value, rel=1e-14, abs=1e-300)


def test_scaling_adds_no_digits_of_its_own() -> None:
    assert [read_quantity(f"{n} us", TIME) for n in (2, 3, 7)] == [2e-6, 3e-6, 7e-6]
    assert read_quantity("5 mohm", RESISTANCE) == 0.005


@pytest.mark.parametrize(
    ("written", "kind", "says"),
    [
        (125, TEMPERATURE, "125 has no unit; write '125 degC'"),
        (0, CURRENT, "0 has no unit; write '0 A'"),
        ("12", VOLTAGE, "12 has no unit; write '12 V'"),
        (0.3, FRACTION, "0.3 has no unit; write '30 %'"),
        (30, FRACTION, "30 has no unit; write '30 %'"),
        (40, TIME, "40 has no unit; write '40 s' if that is meant, or for example '500 ms'"),
        ("5 V", TIME, "'5 V' is a voltage, not a time; write for example '500 ms'"),
        ("5 K", TIME, "'5 K' is a temperature, not a time"),
        ("5 %", TIME, "'5 %' is a fraction, not a time"),
        ("1 A^2", CURRENT, "not a current"),
        ("5 degC", DIFFERENCE, "is a temperature, not a temperature difference; write it in kelvin: '1 K'"),
        ("5 C", TEMPERATURE, "did you mean 'degC'?"),
        ("5 US", TIME, "did you mean 'us'?"),
        ("5 mOhm", RESISTANCE, "did you mean 'mohm'?"),
        ("5 parsec", TIME, "'parsec' is no unit known here"),
        ("2,5 ms", TIME, "write a decimal point: '2.5 ms'"),
        ("1.5.3 ms", TIME, "write a time, for example '500 ms'"),
        ("2 ms + 3 s", TIME, "write a time"),
        ("5 s^-1", TIME, "'5 s^-1' is a frequency, not a time"),
        ("__import__('os')", TIME, "write a number and a unit"),
        ("5 os.system", TIME, "is no unit"),
        ("", TIME, "write a number and a unit"),
        (None, TIME, "nothing stands here"),
        (True, TIME, "'true' is no value"),
        ([1], TIME, "a list is no value"),
        (math.nan, TIME, "is no finite number"),
        ("1e999 s", TIME, "is too large"),
        ("nan s", TIME, "write a number and a unit"),
        ("1 mm", FACTOR, "has a unit where a plain number is expected"),
    ],
)
def test_what_is_no_such_value_says_what_to_write(written: object, kind: Kind, says: str) -> None:
    with pytest.raises(ValueError) as caught:  # noqa: PT011  # the words are compared below
        read_quantity(written, kind)
    assert says in str(caught.value)


@pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.name)
def test_the_example_that_messages_show_is_readable(kind: Kind) -> None:
    assert math.isfinite(read_quantity(kind.example, kind))


@given(st.floats(-1e6, 1e6, allow_nan=False), st.sampled_from(["ns", "us", "ms", "s", "min", "h"]))
def test_scaling_is_linear_in_the_number(number: float, unit: str) -> None:
    one = read_quantity(f"1 {unit}", TIME)
    assert read_quantity(f"{number!r} {unit}", TIME) == pytest.approx(number * one, rel=1e-12, abs=1e-30)


@given(st.text(max_size=12))
def test_no_text_makes_the_reader_fail_otherwise_than_by_saying_so(text: str) -> None:
    try:
        value = read_quantity(text, INDUCTANCE)
    except ValueError:
        return
    assert math.isfinite(value)


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [(2e-5, "s", "20 us"), (0.5, "s", "500 ms"), (12.0, "V", "12 V"), (7200.0, "s", "7200 s"), (0.0, "A", "0 A"),
     (1e-6, "s", "1 us"), (1500.0, "W", "1.5 kW"), (85.0, "degC", "85 degC")],
)  # fmt: skip
def test_values_are_shown_as_users_write_them(value: float, unit: str, text: str) -> None:
    assert shown(value, unit) == text
