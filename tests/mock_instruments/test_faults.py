"""Faults that a test can ask for, and the control requests, in memory."""

import pytest

from mock_instruments import ROLES

NO_ERROR = '0,"No error"'


def plan(client, role, kind, **rest):
    reply = client.bench.control({"do": "fault", "role": role, "kind": kind, **rest})
    assert "error" not in reply, reply


def answers(client, role, message=b"*IDN?\n"):
    return list(client.talks[role].feed(message))


@pytest.mark.parametrize("role", ROLES)
@pytest.mark.parametrize("kind", ["silent", "deaf"])
def test_an_instrument_may_not_answer(client, role, kind):
    plan(client, role, kind, after=1, count=2)
    replies = [client.ask(role, "*IDN?") for _ in range(4)]
    assert [bool(reply) for reply in replies] == [True, False, False, True]
    assert client.ask(role, "SYST:ERR?") == NO_ERROR


def test_silent_does_what_it_was_told_and_deaf_does_not(client):
    plan(client, "supply", "silent")
    assert client.ask("supply", "SOUR:VOLT 5;VOLT?") == ""
    assert float(client.ask("supply", "SOUR:VOLT?")) == 5.0
    plan(client, "supply", "deaf")
    assert client.ask("supply", "SOUR:VOLT 7;VOLT?") == ""
    assert float(client.ask("supply", "SOUR:VOLT?")) == 5.0


def test_a_fault_that_spoils_replies_waits_for_a_question(client):
    plan(client, "supply", "silent")
    client.ask("supply", "SOUR:VOLT 5")
    assert client.ask("supply", "SOUR:VOLT?") == ""


def test_a_slow_instrument_takes_wall_time(client):
    plan(client, "lcr", "slow", seconds=1.5)
    (answer,) = answers(client, "lcr")
    assert (answer.wait, answer.data.endswith(b"\n")) == (1.5, True)


def test_half_an_answer_has_no_end(client):
    whole = client.raw("digitizer", b"*IDN?\n")
    plan(client, "digitizer", "half")
    (answer,) = answers(client, "digitizer")
    assert whole.startswith(answer.data)
    assert 0 < len(answer.data) < len(whole)
    assert b"\n" not in answer.data


def test_garbage_is_one_line_of_it(client):
    plan(client, "chamber", "garbage")
    (answer,) = answers(client, "chamber")
    assert answer.data.count(b"\n") == 1
    assert b"Mock" not in answer.data


def test_an_error_stands_in_the_queue(client):
    plan(client, "pulser", "error")
    assert client.ask("pulser", "SOUR:PULS:WIDT 5e-6;:SYST:ERR?") == '-240,"Hardware error"'
    assert client.ask("pulser", "SYST:ERR?") == NO_ERROR


def test_a_closed_connection_says_nothing_and_does_nothing(client):
    plan(client, "supply", "close")
    (answer,) = answers(client, "supply", b"SOUR:VOLT 5;VOLT?\n")
    assert (answer.data, answer.close) == (b"", True)
    assert float(client.ask("supply", "SOUR:VOLT?")) == 0.0


def test_a_restart_forgets_everything_and_ends_every_conversation(client):
    client.charge()
    other = client.bench.conversation("supply")
    assert client.ask("supply", "*ESR?") == "128"
    plan(client, "supply", "restart")
    assert answers(client, "supply")[0].close
    assert next(other.feed(b"*IDN?\n")).close
    assert client.world.supply_on is False
    fresh = client.bench.conversation("supply")
    assert b"".join(a.data for a in fresh.feed(b"*ESR?;:SOUR:VOLT?;:OUTP?\n")) == b"128;+0.000000000E+00;0\n"


def test_another_unit_has_another_serial(client):
    before = client.ask("lcr", "*IDN?")
    plan(client, "lcr", "identity")
    after = client.ask("lcr", "*IDN?")
    assert before.split(",")[2] != after.split(",")[2]
    assert client.ask("lcr", "*IDN?") == after


@pytest.mark.parametrize(
    ("role", "message", "index"),
    [("lcr", "READ?", 0), ("ohmmeter", "MEAS:FRES?", 0), ("thermometer", "MEAS:TEMP? (@1)", 0), ("chamber", "MEAS:TEMP?", 0),
     ("supply", "MEAS:VOLT?", 0), ("bias_source", "MEAS:CURR?", 0)],
)  # fmt: skip
def test_an_overload_reads_9_9e37(client, role, message, index):
    """SCPI-1999 vol. 1, 7.2.1.4: infinity is 9.9E37."""
    client.ask("multiplexer", "ROUT:CLOS (@101,202,203)")
    plan(client, role, "overload")
    assert float(client.ask(role, message).split(",")[index]) == 9.9e37
    assert float(client.ask(role, message).split(",")[index]) < 1e6


def test_an_overloaded_digitizer_sticks_at_the_top(client):
    client.charge()
    plan(client, "digitizer", "overload", after=1)
    tops = []
    for _ in range(3):
        client.ask("digitizer", "FORM ASC;:INIT")
        client.fire(5e-6)
        volts = [float(each) for each in client.ask("digitizer", "TRAC? CH1").split(",")]
        tops.append(min(volts) > 45.0)  # of 50 V
    assert tops == [False, True, False]


def test_a_stuck_value_repeats_but_its_errors_do_not(client):
    first = client.ask("thermometer", "MEAS:TEMP? (@1)")
    plan(client, "thermometer", "stuck", count=0)
    client.ask("thermometer", "FOO")
    assert [client.ask("thermometer", "MEAS:TEMP? (@1)") for _ in range(3)] == [first] * 3
    assert client.ask("thermometer", "SYST:ERR?").startswith("-113,")
    plan(client, "thermometer", "none")
    assert client.ask("thermometer", "MEAS:TEMP? (@1)") != first


def test_parts_fail_for_good_after_some_uses(client):
    client.charge()
    plan(client, "part", "open", channel=1, after=2)
    for _ in range(3):
        client.fire(5e-6)
    assert client.world.parts[1].fault == "open"
    seen = client.world.ledger.current
    client.fire(10e-6)
    assert client.world.ledger.current == seen
    plan(client, "part", "none", channel=1)
    client.fire(10e-6)
    assert client.world.ledger.current > seen


def test_a_shorted_part_takes_what_the_bank_gives(client):
    client.charge()
    plan(client, "part", "short", channel=1)
    client.fire(5e-6)
    assert client.world.ledger.current > 25.0


@pytest.mark.parametrize("kind", ["silent", "garbage", "error", "overload", "close"])
def test_the_line_chamber_has_faults_too(make_client, kind):
    odd = make_client(spelling="odd")
    plan(odd, "chamber", kind)
    found = list(odd.talks["chamber"].feed(b"T\r"))
    if kind == "silent":
        assert found == []
    elif kind == "close":
        assert found[0].close
    elif kind == "garbage":
        assert not found[0].data.startswith(b"T=")
        assert found[0].data.endswith(b"\r")
    elif kind == "overload":
        assert found[0].data == b"T=+999.99\r"
    else:
        assert found[0].data.startswith(b"T=")
        assert odd.raw("chamber", b"E\r") == b"E3\r"


def test_the_line_chamber_shows_another_unit(make_client):
    odd = make_client(spelling="odd")
    plan(odd, "chamber", "identity")
    assert odd.raw("chamber", b"ID\r") == b"CHAMBER MOCK 2\r"


@pytest.mark.parametrize(
    ("request_", "text"),
    [
        ({}, "do"),
        ({"do": "dance"}, "dance"),
        ({"do": "advance"}, "seconds"),
        ({"do": "advance", "seconds": -1}, "forward"),
        ({"do": "advance", "seconds": "soon"}, "soon"),
        ({"do": "fault", "role": "oven", "kind": "slow"}, "oven"),
        ({"do": "fault", "role": "lcr", "kind": "tired"}, "tired"),
        ({"do": "fault", "role": "part", "kind": "slow"}, "slow"),
        ({"do": "fault", "role": "part", "kind": "open", "channel": 9}, "9"),
    ],
)
def test_senseless_requests_are_answered_with_an_error(client, request_, text):
    assert text in client.bench.control(request_)["error"]


def test_the_ledger_tells_what_is_on(client):
    client.charge()
    client.ask("chamber", "SOUR:TEMP 60;:OUTP 1")
    on = client.bench.control({"do": "ledger"})["on"]
    assert on | {"bank_voltage": 0} == {
        "supply": True, "pulser": True, "bias": False, "bias_current": 0.0, "bank_voltage": 0, "chamber": True,
        "chamber_setpoint": pytest.approx(60.0), "relays": [101, 201],
    }  # fmt: skip
    assert on["bank_voltage"] == pytest.approx(12.0, abs=1e-3)
    before = client.bench.control({"do": "now"})["now"]
    assert client.bench.control({"do": "advance", "seconds": 1.5})["now"] == pytest.approx(before + 1.5)
