"""Tables of commands. Short forms, paths and suffixes: SCPI-1999 vol. 1 chapter 6; multipliers: IEEE 488.2 table 7-2."""

import math

import pytest

from mock_instruments.scpi_errors import ScpiError
from mock_instruments.scpi_reader import read_message
from mock_instruments.scpi_tree import (
    Boolean,
    Channels,
    Choice,
    Command,
    Decimal,
    Quoted,
    Tree,
    block,
    carry_out,
    number,
    short_form,
)


# SCPI-1999 vol. 1, 6.2.1 (from memory): the first four letters, three if the fourth is a vowel.
@pytest.mark.parametrize(
    ("name", "short"),
    [
        ("VOLTage", "VOLT"), ("CURRent", "CURR"), ("POWer", "POW"), ("TEMPerature", "TEMP"), ("WIDTh", "WIDT"),
        ("PERiod", "PER"), ("DELay", "DEL"), ("OUTPut", "OUTP"), ("FETCh", "FETC"), ("MEASure", "MEAS"),
        ("TRIGger", "TRIG"), ("SOURce", "SOUR"), ("IMMediate", "IMM"), ("CLOSe", "CLOS"), ("POINts", "POIN"),
        ("TINTerval", "TINT"),
    ],
)  # fmt: skip
def test_short_forms_are_those_of_the_standard(name, short):
    assert short_form(name) == short


VOLTS = Command(
    "[SOURce:]VOLTage[:LEVel][:IMMediate][:AMPLitude]", do=lambda v: None, takes=(Decimal("V", 0, 30, 1),)
)
RANGE = Command("SENSe#2:VOLTage[:DC]:RANGe[:UPPer]", ask=lambda n: str(n), numbered=True)
STATE = Command("OUTPut[:STATe]", ask=lambda: "1")
EVENT = Command("STATus:OPERation[:EVENt]", ask=lambda: "0")
TREE = Tree([VOLTS, RANGE, STATE, EVENT])


@pytest.mark.parametrize(
    ("header", "command"),
    [
        ("VOLT", VOLTS), ("VOLTAGE", VOLTS), ("SOUR:VOLT", VOLTS), ("SOURCE:VOLTAGE:LEVEL:IMMEDIATE:AMPLITUDE", VOLTS),
        ("SOUR:VOLT:AMPL", VOLTS), ("SENS:VOLT:RANG", RANGE), ("SENS2:VOLT:DC:RANG:UPP", RANGE), ("OUTP", STATE),
        ("OUTP:STATE", STATE), ("OUTP:STAT", STATE), ("STAT:OPER", EVENT), ("STATUS:OPER:EVEN", EVENT),
    ],
)  # fmt: skip
def test_long_short_and_optional_nodes_lead_to_the_command(header, command):
    assert TREE.find(tuple(header.split(":")))[0] is command


@pytest.mark.parametrize(
    ("header", "error"),
    [
        ("VOLTA", -113),  # only the exact short or the exact long form is legal
        ("VOL", -113),
        ("SOUR:VOLT:DC", -113),
        ("VOLT:SOUR", -113),
        ("OUTP:STATUS", -113),  # STATus and STATe share a short form, not their long ones
        ("STATE:OPER", -113),
        ("SENS3:VOLT:RANG", -114),
        ("SENS0:VOLT:RANG", -114),
        ("VOLT2", -114),
    ],
)
def test_other_headers_are_undefined(header, error):
    with pytest.raises(ScpiError) as raised:
        TREE.find(tuple(header.split(":")))
    assert raised.value.number == error


@pytest.mark.parametrize(
    ("header", "suffix"), [("SENS:VOLT:RANG", 1), ("SENS1:VOLT:RANG", 1), ("SENSE2:VOLT:RANG", 2)]
)
def test_a_missing_numeric_suffix_is_one(header, suffix):
    assert TREE.find(tuple(header.split(":")))[1] == (suffix,)


def datum(text: str):
    return read_message(b"X " + text.encode())[0].data[0]


@pytest.mark.parametrize(
    ("kind", "text", "value"),
    [
        (Decimal("V"), "12", 12.0),
        (Decimal("V"), "12 V", 12.0),
        (Decimal("V"), "12MV", 12e-3),
        (Decimal("V"), "1.5 kV", 1500.0),
        (Decimal("S"), "40us", 40e-6),
        (Decimal("S"), "5 NS", 5e-9),
        (Decimal("HZ"), "1 MHZ", 1e6),  # M before HZ is mega
        (Decimal("OHM"), "1 MOHM", 1e6),  # and before OHM
        (Decimal("A"), "2 MAA", 2e6),  # MA is mega elsewhere
        (Decimal("A"), "2 MA", 2e-3),
        (Decimal("CEL"), "-40 CEL", -40.0),
        (Decimal("V", 0, 30, 1), "MAX", 30.0),
        (Decimal("V", 0, 30, 1), "minimum", 0.0),
        (Decimal("V", 0, 30, 1), "DEF", 1.0),
        (Decimal("", 0, 9, integer=True), "3.6", 4.0),
        (Boolean(), "ON", True),
        (Boolean(), "0", False),
        (Boolean(), "0.4", False),  # a number is rounded before it is compared with zero
        (Boolean(), "7", True),
        (Choice(("NORMal", "INVerted")), "inv", "INV"),
        (Choice(("NORMal", "INVerted")), "NORMAL", "NORM"),
        (Quoted(), "'FIMP'", "FIMP"),
        (Channels(), "(@1,3:5)", (1, 3, 4, 5)),
        (Channels(), "(@5:3)", (5, 4, 3)),
        (Channels(), "(@ 101 , 201 )", (101, 201)),
    ],
)
def test_a_parameter_is_read(kind, text, value):
    read = kind.read(datum(text))
    assert read == (pytest.approx(value, rel=1e-15) if isinstance(value, float) else value)


@pytest.mark.parametrize(
    ("kind", "text", "error"),
    [
        (Decimal("V", 0, 30), "31", -222),
        (Decimal("V"), "FAST", -104),
        (Decimal("V", 0, 30), "DEF", -224),
        (Decimal("V"), "'12'", -158),
        (Decimal("V"), "#11x", -168),
        (Decimal("V"), "(@1)", -178),
        (Decimal("V"), "12 A", -131),
        (Decimal("V"), "12 QV", -131),
        (Decimal(""), "12 V", -138),
        (Boolean(), "MAYBE", -224),
        (Choice(("NORMal",)), "1", -128),
        (Choice(("NORMal",)), "NORMA", -224),
        (Choice(("NORMal",)), "'NORM'", -158),
        (Quoted(), "FIMP", -148),
        (Quoted(), "1", -128),
        (Channels(), "(1:3)", -171),
        (Channels(), "(@1;2)", -171),
        (Channels(1, 9), "(@12)", -222),
        (Channels(), "101", -128),
    ],
)
def test_a_wrong_parameter_has_its_standard_number(kind, text, error):
    with pytest.raises(ScpiError) as raised:
        kind.read(datum(text))
    assert raised.value.number == error


@pytest.mark.parametrize(
    ("message", "error"),
    [(b"VOLT", -109), (b"VOLT 1,2", -108), (b"VOLT?", -113), (b"OUTP 1", -113), (b"OUTP? 1", -108)],
)
def test_too_many_too_few_and_the_wrong_way(message, error):
    unit = read_message(message)[0]
    command, suffixes = TREE.find(unit.nodes)
    with pytest.raises(ScpiError) as raised:
        carry_out(command, suffixes, unit)
    assert raised.value.number == error


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (12.0, "+1.200000000E+01"),
        (-2.5e-6, "-2.500000000E-06"),
        (math.inf, "9.9E+37"),  # SCPI-1999 vol. 1, 7.2.1.4
        (-math.inf, "-9.9E+37"),
        (math.nan, "9.91E+37"),  # 7.2.1.5
    ],
)
def test_numbers_as_answered(value, text):
    assert number(value) == text


def test_blocks_as_answered():
    """IEEE 488.2, 7.7.6: `#15hallo`, and 4000 32-bit numbers are `#516000` and 16000 bytes."""
    assert block(b"hallo") == b"#15hallo"
    assert block(bytes(16)) == b"#216" + bytes(16)
    assert block(bytes(16000))[:7] == b"#516000"
    assert len(block(bytes(16000))) == 16007


def test_two_commands_of_one_spelling_are_refused():
    with pytest.raises(ValueError, match="stands in"):
        Tree([VOLTS, Command("VOLTage", ask=lambda: "1")])
