"""Cutting and reading messages. Rules: IEEE 488.2-1992 chapter 7 and SCPI-1999 vol. 1 chapters 6 and 8, error numbers
SCPI-1999 vol. 2 21.8."""

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mock_instruments.scpi_reader import (
    INPUT_BUFFER,
    Block,
    Expression,
    Faulty,
    MessageReader,
    Number,
    Text,
    Unit,
    Word,
    read_message,
)


def only(message: bytes) -> Unit | Faulty:
    (unit,) = read_message(message)
    return unit


@pytest.mark.parametrize(
    ("message", "expected"),
    [
        (b"*IDN?", Unit(("IDN",), query=True, common=True)),
        (b"sour:volt 12", Unit(("SOUR", "VOLT"), query=False, data=(Number("12"),))),
        (b":SOUR:VOLT?", Unit(("SOUR", "VOLT"), query=True, absolute=True)),
        (b"VOLT? MAX", Unit(("VOLT",), query=True, data=(Word("MAX"),))),
        (b"VOLT 12 V", Unit(("VOLT",), query=False, data=(Number("12", "V"),))),
        (b"WIDT 2.5e-6s", Unit(("WIDT",), query=False, data=(Number("2.5E-6", "S"),))),
        (b"WIDT 40 us", Unit(("WIDT",), query=False, data=(Number("40", "US"),))),
        (b"WIDT 1 e 3", Unit(("WIDT",), query=False, data=(Number("1E3"),))),
        (b"FORM INT,16", Unit(("FORM",), query=False, data=(Word("INT"), Number("16")))),
        (b'FUNC "FI;MP"', Unit(("FUNC",), query=False, data=(Text("FI;MP"),))),
        (b"FUNC 'it''s'", Unit(("FUNC",), query=False, data=(Text("it's"),))),
        (b"CLOS (@1,3:5)", Unit(("CLOS",), query=False, data=(Expression("@1,3:5"),))),
        (b"*ESE #H20", Unit(("ESE",), query=False, common=True, data=(Number("32"),))),
        (b"*ESE #B100000", Unit(("ESE",), query=False, common=True, data=(Number("32"),))),
        (b"*ESE #Q40", Unit(("ESE",), query=False, common=True, data=(Number("32"),))),
        # 7.7.6: one length digit, five bytes
        (b"DATA #15hallo", Unit(("DATA",), query=False, data=(Block(b"hallo"),))),
        (b"DATA #15h;l,o", Unit(("DATA",), query=False, data=(Block(b"h;l,o"),))),
        (b"DATA #0any;thing", Unit(("DATA",), query=False, data=(Block(b"any;thing"),))),
    ],
)
def test_a_unit_is_read(message, expected):
    assert only(message) == expected


@pytest.mark.parametrize(
    ("message", "number"),
    [
        (b"SOUR:V\xf6LT 1", -101),  # invalid character
        (b"SOUR:VOLT \xff", -101),
        (b"SOUR:VO$T 1", -101),
        (b"VOLT 1;;CURR 1", -102),  # syntax error: an empty unit
        (b"SOUR::VOLT 1", -102),
        (b"VOLT,12", -103),  # invalid separator
        (b"FORM INT,,16", -103),
        (b"*IDN:VOLT?", -110),
        (b"VOLT?12", -111),  # header separator error
        (b"FUNC'FIMP'", -111),
        (b"ABCDEFGHIJKLM 1", -112),  # 13 characters; 12 are allowed (488.2, 7.6.1)
        (b"VOLT 1.2.3", -121),  # invalid character in number
        (b"VOLT +", -121),
        (b"*ESE #HXY", -121),
        (b"VOLT 1E40000", -123),  # exponent too large: above 32000
        (b"VOLT " + b"1" * 256, -124),  # too many digits: above 255
        (b"VOLT 1 V2V", -131),  # invalid suffix
        (b"VOLT 1 ABCDEFGHIJKLM", -134),  # suffix too long
        (b"FORM IN-T", -141),  # invalid character data
        (b'FUNC "FIMP', -151),  # string without its end
        (b"DATA #Xabc", -161),  # non-digit after #
        (b"DATA #15hal", -161),  # count larger than the data
        (b"DATA #15hallooo", -161),
        (b"CLOS (@1", -171),  # invalid expression
    ],
)
def test_a_unit_that_cannot_be_read_has_its_standard_number(message, number):
    faults = [unit for unit in read_message(message) if isinstance(unit, Faulty)]
    assert [fault.number for fault in faults] == [number]


def test_the_units_after_a_bad_one_are_still_read():
    first, second, third = read_message(b"VOLT 1;V$ 2;:SYST:ERR?")
    assert isinstance(second, Faulty)
    assert first == Unit(("VOLT",), query=False, data=(Number("1"),))
    assert third == Unit(("SYST", "ERR"), query=True, absolute=True)


@pytest.mark.parametrize("message", [b"", b"   ", b"\r", b"\t"])
def test_an_empty_message_has_no_units(message):
    assert read_message(message) == ()


def test_a_mnemonic_of_twelve_characters_is_allowed():
    assert only(b"ABCDEFGHIJKL 1") == Unit(("ABCDEFGHIJKL",), query=False, data=(Number("1"),))


def cut(*pieces: bytes) -> list[bytes]:
    reader = MessageReader()
    return [message for piece in pieces for message in reader.feed(piece)]


def test_messages_end_at_a_newline_with_or_without_return():
    assert cut(b"*CLS\n*IDN?\r\nVOLT") == [b"*CLS", b"*IDN?"]


def test_a_newline_inside_a_definite_block_belongs_to_it():
    assert cut(b"DATA #15ha\nlo\n*IDN?\n") == [b"DATA #15ha\nlo", b"*IDN?"]


def test_a_hash_inside_quotes_starts_no_block():
    assert cut(b'FUNC "#19"\n*CLS\n') == [b'FUNC "#19"', b"*CLS"]


def test_an_endless_message_overruns_the_buffer_and_is_forgotten():
    reader = MessageReader()
    assert list(reader.feed(b"A" * (INPUT_BUFFER + 1))) == []
    assert reader.overruns == 1
    assert list(reader.feed(b"*IDN?\n")) == [b"*IDN?"]


STREAM = b'*CLS;*IDN?\nDATA #15a\nb"c;VOLT 1\r\nFUNC "#14";:SYST:ERR?\nDATA #0x\n\nVOLT 12;CURR?\n#\n#1\nA #2x\nB\n'


@given(st.lists(st.integers(0, len(STREAM)), max_size=12))
def test_bytes_split_anywhere_give_the_same_messages(places):
    bounds = [0, *sorted(places), len(STREAM)]
    assert cut(*(STREAM[a:b] for a, b in itertools.pairwise(bounds))) == cut(STREAM)


@given(st.binary(max_size=60))
def test_no_bytes_make_the_reader_fail(data):
    for message in cut(data + b"\n"):
        assert all(isinstance(unit, Unit | Faulty) for unit in read_message(message))
