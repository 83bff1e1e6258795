"""Error queue and registers: SCPI-1999 vol. 2, 21.8; IEEE 488.2 chapter 11."""

import pytest

from mock_instruments.scpi_errors import ERRORS, error_text, event_bit
from mock_instruments.scpi_status import QUEUE_LENGTH, Register, Status

# Numbers and texts as printed in 21.8, of the standard (from memory), not taken from the code.
PRINTED = {
    0: "No error", -100: "Command error", -101: "Invalid character", -102: "Syntax error", -103: "Invalid separator",
    -104: "Data type error", -108: "Parameter not allowed", -109: "Missing parameter", -110: "Command header error",
    -111: "Header separator error", -112: "Program mnemonic too long", -113: "Undefined header",
    -114: "Header suffix out of range", -121: "Invalid character in number", -123: "Exponent too large",
    -124: "Too many digits", -128: "Numeric data not allowed", -131: "Invalid suffix", -134: "Suffix too long",
    -138: "Suffix not allowed", -141: "Invalid character data", -148: "Character data not allowed",
    -151: "Invalid string data", -158: "String data not allowed", -161: "Invalid block data",
    -168: "Block data not allowed", -171: "Invalid expression", -178: "Expression data not allowed",
    -211: "Trigger ignored", -213: "Init ignored", -221: "Settings conflict", -222: "Data out of range",
    -224: "Illegal parameter value", -230: "Data corrupt or stale", -240: "Hardware error", -350: "Queue overflow",
    -363: "Input buffer overrun", -410: "Query INTERRUPTED", -420: "Query UNTERMINATED",
}  # fmt: skip


@pytest.mark.parametrize(("number", "text"), PRINTED.items())
def test_errors_say_what_the_standard_prints(number, text):
    assert error_text(number) == f'{number},"{text}"'


@pytest.mark.parametrize(
    ("number", "bit"),
    # -1xx CME 32, -2xx EXE 16, -3xx and positive DDE 8, -4xx QYE 4, -500 PON, -600 URQ, -700 RQC, -800 OPC
    [
        (-113, 32),
        (-222, 16),
        (-350, 8),
        (101, 8),
        (-410, 4),
        (-500, 128),
        (-600, 64),
        (-700, 2),
        (-800, 1),
        (0, 0),
    ],
)
def test_an_error_sets_the_bit_of_its_class(number, bit):
    assert event_bit(number) == bit


def test_every_error_has_a_class():
    assert all(event_bit(number) for number in ERRORS if number)


def test_errors_come_out_in_the_order_they_went_in():
    status = Status()
    status.report(-113, "FOO")
    status.report(-222)
    assert [status.next_error() for _ in range(3)] == [
        '-113,"Undefined header;FOO"',
        '-222,"Data out of range"',
        '0,"No error"',
    ]


def test_a_full_queue_keeps_the_old_errors_and_says_overflow_last():
    """21.8: -350 stands in lieu of the error that found the queue full; that error is lost, older ones stay."""
    status = Status()
    for n in range(QUEUE_LENGTH + 5):
        status.report(-222, str(n))
    assert len(status.errors) == QUEUE_LENGTH
    every = [status.next_error() for _ in range(QUEUE_LENGTH)]
    assert every[:-1] == [f'-222,"Data out of range;{n}"' for n in range(QUEUE_LENGTH - 1)]
    assert every[-1] == '-350,"Queue overflow"'
    assert status.next_error() == '0,"No error"'


def test_power_on_shows_once():
    status = Status()
    assert (status.take_event(), status.take_event()) == (128, 0)


def test_the_status_byte_sums_up():
    status = Status()
    status.take_event()
    assert status.byte() == 0
    status.report(-113)
    assert status.byte() == 4  # error queue not empty
    status.event_enable = 32
    assert status.byte() == 4 + 32
    status.service_enable = 32
    assert status.byte() == 4 + 32 + 64
    status.operation.enable = 32
    status.operation.set_condition(32)
    assert status.byte() == 4 + 32 + 64 + 128
    status.clear()
    assert status.byte() == 0
    assert status.event_enable == 32  # *CLS leaves the enables


@pytest.mark.parametrize(
    ("positive", "negative", "events"),
    [(0x7FFF, 0, [32, 0]), (0, 0x7FFF, [0, 32]), (32, 32, [32, 32]), (0, 0, [0, 0])],
)
def test_transition_filters_choose_the_edges(positive, negative, events):
    register = Register(positive=positive, negative=negative)
    seen = []
    for condition in (32, 0):
        register.set_condition(condition)
        seen.append(register.take_event())
    assert seen == events
