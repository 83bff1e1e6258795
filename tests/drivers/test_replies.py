import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.replies import parse_number, parse_numbers, split_units

OHMS = {"OHM": 1.0, "MOHM": 1e6}  # IEEE 488.2, table 7-2: M is mega before OHM


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("12", 12.0),  # IEEE 488.2, 8.7.2: NR1
        ("+12", 12.0),
        ("-0.5", -0.5),  # 8.7.3: NR2
        (".5", 0.5),
        ("5.", 5.0),
        ("+1.2000E+01", 12.0),  # 8.7.4: NR3
        ("1.2e-06", 1.2e-6),
        (" 12 ", 12.0),
        ("1.8012E-2 OHM", 1.8012e-2),
        ("2MOHM", 2e6),
        ("1 E3", 1000.0),
    ],
)
def test_a_number_is_read_in_every_form(text: str, value: float) -> None:
    assert parse_number(text, OHMS) == value


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("9.9E37", math.inf),  # SCPI-1999 vol. 1, 7.2.1.4
        ("-9.9E37", -math.inf),
        ("+9.900000E+37", math.inf),
        (repr(float(np.float32(9.9e37))), math.inf),  # through a float32 on its way
        ("1E38", math.nan),  # beyond infinity there is no number
        ("INF", math.inf),
        ("NINF", -math.inf),
    ],
)
def test_scpi_spells_what_is_beyond_the_range(text: str, value: float) -> None:
    assert parse_number(text) == pytest.approx(value, nan_ok=True)


@pytest.mark.parametrize("text", ["9.91E37", "+9.910000E+37", "NAN", "nan", repr(float(np.float32(9.91e37)))])
def test_scpi_spells_not_a_number(text: str) -> None:
    # SCPI-1999 vol. 1, 7.2.1.5; 9.91E37 is above 9.9E37 as float64 and as float32.
    assert math.isnan(parse_number(text))


def test_a_large_number_is_a_number() -> None:
    assert parse_number("9.8E37") == 9.8e37


@pytest.mark.parametrize("text", ["", "ABC", "1,2", "--1", "1E", "0x10", "\x00", "1.2.3", "E5", "one"])
def test_what_is_no_number_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match=r"no number|has the unit"):
        parse_number(text)


def test_a_unit_that_the_dialect_does_not_expect_is_refused() -> None:
    with pytest.raises(ValueError, match=r"has the unit 'V'.*'OHM' or 'MOHM'"):
        parse_number("1.2 V", OHMS)
    with pytest.raises(ValueError, match="expects none"):
        parse_number("1.2 V")


@pytest.mark.parametrize(
    ("text", "values"),
    [
        ("1,2", (1.0, 2.0)),
        ("1", (1.0,)),
        ("", ()),
        ("(@101,201)", (101.0, 201.0)),
        ("(@)", ()),
        ("2.2E-5, 1.8E-2", (2.2e-5, 1.8e-2)),
    ],
)
def test_numbers_come_with_commas_or_as_a_channel_list(text: str, values: tuple[float, ...]) -> None:
    assert parse_numbers(text) == values


@pytest.mark.parametrize(
    ("line", "units"),
    [
        ("12", ["12"]),
        ('12;0,"No error"', ["12", '0,"No error"']),
        ("1; 2 ;3", ["1", "2", "3"]),
        # SCPI-1999 vol. 2, 21.8: device information stands behind a semicolon, inside the quotes.
        ('-222,"Data out of range;SOUR:VOLT 99";128', ['-222,"Data out of range;SOUR:VOLT 99"', "128"]),
        ('"a""b;c";2', ['"a""b;c"', "2"]),
        ("", [""]),
        (";", ["", ""]),
    ],
)
def test_replies_in_one_line_come_apart(line: str, units: list[str]) -> None:
    assert split_units(line, ";") == units


@given(
    st.lists(st.sampled_from(["12", "-1.5E3", '0,"No error"', '-113,"Undefined header;X"', "ON"]), min_size=1)
)
def test_joined_replies_come_apart_as_they_were(units: list[str]) -> None:
    assert split_units(";".join(units), ";") == units
