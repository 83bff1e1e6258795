"""Intents in, lines out; replies in, values or errors out. A SCPI supply, and a line protocol without any SCPI."""

from collections.abc import Callable

import pytest
import yaml

from drivers import (
    CLOSED,
    SILENCE,
    Dialect,
    Disconnected,
    Garbled,
    NoReply,
    Refused,
    Restarted,
    ScriptedSession,
)
from drivers.conversation import Conversation

SET = "SOUR:VOLT 12;:SOUR:CURR 1;:SOUR:VOLT?;:SOUR:CURR?;:SYST:ERR?;*ESR?"
MEASURE = "MEAS:VOLT?;:MEAS:CURR?;:SYST:ERR?;*ESR?"
NONE = '0,"No error"'  # SCPI-1999 vol. 2, 21.8.2: the queue is empty
Shipped = Callable[[str], Dialect]


def supply(shipped: Shipped, *script: tuple) -> tuple[Conversation, ScriptedSession]:
    session = ScriptedSession(script, role="supply")
    return Conversation(session, shipped("scpi_supply")), session


def chamber(shipped: Shipped, *script: tuple) -> tuple[Conversation, ScriptedSession]:
    session = ScriptedSession(script, role="chamber", send=b"\r", reply=b"\r")
    return Conversation(session, shipped("line_chamber")), session


def test_settings_read_back_and_errors_are_one_round_trip(shipped: Shipped) -> None:
    talk, session = supply(shipped, (SET, f"12.0;1.0;{NONE};0"))
    values = talk.carry_out("set", voltage=12.0, current=1.0)
    assert values.numbers == {"voltage": 12.0, "current": 1.0}
    assert session.is_finished


def test_common_commands_are_joined_without_a_colon(shipped: Shipped) -> None:
    # SCPI-1999 vol. 1, 6.2.4 and IEEE 488.2, 7.6.1: a common command has no path.
    talk, _ = supply(shipped, (f"*RST;*CLS;*OPC?;:{'SYST:ERR?;*ESR?'}", f"1;{NONE};0"))
    talk.say(talk.dialect.reset)


def test_an_error_in_the_queue_is_a_refusal_with_all_that_the_queue_holds(shipped: Shipped) -> None:
    talk, session = supply(
        shipped,
        (SET, '5;1;-222,"Data out of range;SOUR:VOLT 12";16'),
        ("SYST:ERR?", '-350,"Queue overflow"'),
        ("SYST:ERR?", NONE),
    )
    with pytest.raises(Refused, match="refused 'SOUR:VOLT 12") as caught:
        talk.carry_out("set", voltage=12.0, current=1.0)
    assert caught.value.errors == ('-222,"Data out of range;SOUR:VOLT 12"', '-350,"Queue overflow"')
    assert caught.value.role == "supply"
    assert caught.value.resource == session.resource


@pytest.mark.parametrize("none", ['0,"No error"', '+0,"No error"', '0,""', "0,No error"])
def test_an_empty_queue_is_known_in_each_of_its_spellings(shipped: Shipped, none: str) -> None:
    talk, _ = supply(shipped, (MEASURE, f"1;2;{none};0"))
    assert talk.carry_out("measure").numbers == {"voltage": 1.0, "current": 2.0}


def test_a_query_that_was_not_understood_leaves_its_error(shipped: Shipped) -> None:
    # One reply is missing: the error queue, which was asked in the same line, says why.
    talk, _ = supply(shipped, (MEASURE, '12;-113,"Undefined header";32'), ("SYST:ERR?", NONE))
    with pytest.raises(Refused, match="Undefined header"):
        talk.carry_out("measure")


@pytest.mark.parametrize(
    "reply",
    [
        "12",  # a reply is missing and nothing says why
        f"12;13;14;{NONE};0",  # one too many
        f"12;twelve;{NONE};0",
        f"12;13 V;{NONE};0",
        "12;13;garbage;0",
        f"12;13;{NONE};pon",
        f"12;13;{NONE};9.91E37",
        "",
        b"\xff\x80;1;2;3\n",
    ],
)
def test_a_reply_that_makes_no_sense_is_garbled(shipped: Shipped, reply: str | bytes) -> None:
    talk, _ = supply(shipped, (MEASURE, reply))
    with pytest.raises(Garbled, match=r"supply \(SCRIPT\): the reply to '.*' makes no sense"):
        talk.carry_out("measure")


@pytest.mark.parametrize(
    ("reply", "error"),
    [(SILENCE, NoReply), (CLOSED, Disconnected), (b"12;0.1", Garbled), ("rubbish", Garbled)],
)
def test_a_broken_exchange_is_followed_by_a_new_connection(
    shipped: Shipped, reply, error: type[Exception]
) -> None:
    # A late reply must never be taken for the answer to the next question.
    asked = [("SYST:ERR?", NONE)] if error is NoReply else []
    talk, session = supply(shipped, (MEASURE, reply), *asked, (MEASURE, f"1;2;{NONE};0"))
    with pytest.raises(error):
        talk.carry_out("measure")
    assert session.reopened == 0
    assert talk.carry_out("measure").numbers["voltage"] == 1.0
    assert session.reopened == 1


def test_an_exchange_that_was_interrupted_is_out_of_step(
    shipped: Shipped, monkeypatch: pytest.MonkeyPatch
) -> None:
    # Ctrl-C between question and reply: the reply is still on its way when the safe state is asked for.
    talk, session = supply(shipped, (MEASURE, f"11;22;{NONE};0"), (MEASURE, f"1;2;{NONE};0"))
    with monkeypatch.context() as patch:
        patch.setattr(session, "read_line", lambda: (_ for _ in ()).throw(KeyboardInterrupt))
        with pytest.raises(KeyboardInterrupt):
            talk.carry_out("measure")
    assert talk.carry_out("measure").numbers == {"voltage": 1.0, "current": 2.0}
    assert session.reopened == 1


def test_a_line_without_reply_that_was_refused_is_told_at_the_next(shipped: Shipped) -> None:
    # Some instruments drop a whole line at its first error, the query for the error with it.
    talk, _ = supply(
        shipped,
        (SET, SILENCE),
        ("SYST:ERR?", '-222,"Data out of range"'),
        ("SYST:ERR?", NONE),
        (SET, f"12;1;{NONE};0"),
    )
    with pytest.raises(NoReply):
        talk.carry_out("set", voltage=12.0, current=1.0)
    with pytest.raises(Refused, match=r"refused 'SOUR:VOLT 12;.*-222"):
        talk.carry_out("set", voltage=12.0, current=1.0)
    talk.carry_out("set", voltage=12.0, current=1.0)


def test_what_only_tells_of_the_broken_exchange_is_no_refusal(shipped: Shipped) -> None:
    talk, _ = supply(
        shipped,
        (MEASURE, SILENCE),
        ("SYST:ERR?", '-410,"Query INTERRUPTED"'),
        ("SYST:ERR?", NONE),
        (MEASURE, f"1;2;{NONE};0"),
    )
    with pytest.raises(NoReply):
        talk.carry_out("measure")
    assert talk.carry_out("measure").numbers["current"] == 2.0


def test_the_first_power_on_bit_is_old_news_and_the_second_is_a_restart(shipped: Shipped) -> None:
    # After power-up *ESR? gives 128 once (IEEE 488.2, 11.5.1: bit 7).
    talk, _ = supply(
        shipped,
        (MEASURE, f"1;2;{NONE};128"),
        (MEASURE, f"1;2;{NONE};0"),
        (MEASURE, f"0;0;{NONE};128"),
        (MEASURE, f"0;0;{NONE};0"),
    )
    talk.carry_out("measure")
    talk.carry_out("measure")
    with pytest.raises(Restarted, match="switched on anew"):
        talk.carry_out("measure")
    talk.carry_out("measure")


def test_a_restart_can_be_asked_for(shipped: Shipped) -> None:
    talk, _ = supply(shipped, ("*ESR?", "128"), ("*ESR?", "32"), ("*ESR?", "160"), ("*ESR?", "0"))
    assert [talk.has_restarted() for _ in range(4)] == [False, False, True, False]


def test_a_number_beyond_the_range_is_a_value(shipped: Shipped) -> None:
    talk, _ = supply(shipped, (MEASURE, f"9.9E37;9.91E37;{NONE};0"))
    numbers = talk.carry_out("measure").numbers
    assert numbers["voltage"] == float("inf")
    assert numbers["current"] != numbers["current"]  # NaN


def test_nothing_is_sent_when_a_value_cannot_be(shipped: Shipped) -> None:
    talk, session = supply(shipped)
    with pytest.raises(ValueError, match="voltage must be a finite number"):
        talk.carry_out("set", voltage=float("nan"), current=1.0)
    assert session.sent == []


def test_a_line_stays_as_short_as_the_instrument_wants(shipped: Shipped) -> None:
    dialect = shipped("scpi_supply").model_copy(update={"longest_line": 24})
    session = ScriptedSession(
        [
            ("SOUR:VOLT 12", SILENCE),
            ("SOUR:CURR 1;:SOUR:VOLT?", "12"),
            ("SOUR:CURR?;:SYST:ERR?;*ESR?", f"1;{NONE};0"),
        ]
    )
    values = Conversation(session, dialect).carry_out("set", voltage=12.0, current=1.0)
    assert values.numbers == {"voltage": 12.0, "current": 1.0}


# ---- a protocol that is no SCPI


def test_a_line_protocol_is_spoken_line_by_line(shipped: Shipped) -> None:
    talk, session = chamber(shipped, ("S=85.00", "OK"), ("S", "S=+085.00"))
    assert talk.carry_out("set", temperature_degC=85.0).numbers == {"temperature_degC": 85.0}
    assert session.is_finished


def test_an_error_instead_of_an_answer_is_a_refusal_in_words(shipped: Shipped) -> None:
    talk, _ = chamber(shipped, ("S=185.00", "E2"), ("E", "E2"), ("E", "E0"))
    with pytest.raises(Refused, match=r"refused 'S=185.00': E2 \(out of range\)") as caught:
        talk.carry_out("set", temperature_degC=185.0)
    assert caught.value.errors[0] == "E2 (out of range)"


def test_another_answer_than_the_expected_one_is_a_refusal(shipped: Shipped) -> None:
    talk, _ = chamber(shipped, ("GO", "BUSY"))
    with pytest.raises(Refused, match="it answered 'BUSY'"):
        talk.carry_out("output_on")


@pytest.mark.parametrize("reply", ["T=", "S=+025.13", "T=warm", "25.13"])
def test_a_reply_of_another_shape_is_garbled(shipped: Shipped, reply: str) -> None:
    talk, _ = chamber(shipped, ("T", reply))
    with pytest.raises(Garbled, match="makes no sense"):
        talk.carry_out("air")


def test_silent_messages_of_a_line_protocol_are_followed_by_a_look_at_the_errors() -> None:
    dialect = Dialect.model_validate(
        yaml.safe_load("""
        role: ohmmeter
        errors: {ask: E, none: E0}
        safe: ['X']
        intents: {read: ['MODE 4W', {ask: 'R', gives: resistance, units: {mohm: 1e-3}}]}
        """)
    )
    session = ScriptedSession([("MODE 4W", SILENCE), ("R", "18.012 mohm"), ("E", "E0")])
    assert Conversation(session, dialect).carry_out("read").numbers["resistance"] == pytest.approx(18.012e-3)
    session = ScriptedSession([("MODE 4W", SILENCE), ("R", "18.012 mohm"), ("E", "E7"), ("E", "E0")])
    with pytest.raises(Refused, match="E7"):
        Conversation(session, dialect).carry_out("read")


def test_completion_can_be_polled_for() -> None:
    dialect = Dialect.model_validate(
        yaml.safe_load("""
        role: ohmmeter
        overload: 'OL'
        safe: []
        intents: {read: ['GO', {ask: 'BUSY?', until: '0'}, {ask: 'R?', gives: resistance}]}
        """)
    )
    script = [("GO", SILENCE), ("BUSY?", "1"), ("BUSY?", "1"), ("BUSY?", "0"), ("R?", "OL")]
    session = ScriptedSession(script)
    assert Conversation(session, dialect).carry_out("read").numbers["resistance"] == float("inf")
    assert session.is_finished


def test_an_operation_that_never_completes_is_no_reply(shipped: Shipped) -> None:
    dialect = Dialect.model_validate(
        {
            "role": "ohmmeter",
            "safe": [],
            "intents": {"read": [{"ask": "R?", "gives": "resistance", "until": "1"}]},
        }
    )
    session = ScriptedSession([("R?", "0"), ("R?", "0")])
    session.timeout = -1.0  # already over: no test waits
    with pytest.raises(NoReply, match="still answers '0'"):
        Conversation(session, dialect).carry_out("read")
