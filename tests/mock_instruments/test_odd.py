"""The odd spelling: a line protocol, offset-binary blocks, a unit behind the number."""

import itertools

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st


@pytest.fixture
def odd(make_client):
    return make_client(spelling="odd")


@pytest.mark.parametrize(
    ("said", "answers"),
    [
        (b"ID\r", b"CHAMBER MOCK 1\r"),
        (b"S\r", b"S=+025.00\r"),
        (b"S=85.00\rS\r", b"OK\rS=+085.00\r"),
        (b"S=-40\rS\r", b"OK\rS=-040.00\r"),
        (b"H=130.0\rGO\rHALT\r", b"OK\rOK\rOK\r"),
        (b"E\r", b"E0\r"),
        (b"*IDN?\rE\rE\r", b"E1\rE1\rE0\r"),  # unknown; asking for the error clears it
        (b"S=151\rE\r", b"E2\rE2\r"),
        (b"H=100\rS=110\r", b"OK\rE2\r"),
        (b"S=\r", b"E1\r"),
        (b"s=30\r\ns\r\n", b"OK\rS=+030.00\r"),
        (b"\r\r", b""),
        (b"S=85.00\n", b""),  # a newline ends nothing here
    ],
)
def test_the_chamber_speaks_lines(odd, said, answers):
    assert odd.raw("chamber", said) == answers


def test_the_line_chamber_is_a_chamber(odd):
    odd.raw("chamber", b"S=85.00\rGO\r")
    odd.world.advance(7200.0)
    assert odd.raw("chamber", b"T\r").startswith(b"T=+0")
    assert float(odd.raw("chamber", b"T\r")[2:]) == pytest.approx(85.0, abs=0.1)
    assert odd.bench.ledger()["on"]["chamber"] is True
    odd.raw("chamber", b"H=60.0\rT\r")
    assert odd.raw("chamber", b"E\r") == b"E3\r"  # tripped
    assert odd.bench.ledger()["on"]["chamber"] is False


LINES = b"ID\rS=60\rS\rfoo\rE\rT\r"


@settings(deadline=None, max_examples=30, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(places=st.lists(st.integers(0, len(LINES)), max_size=6))
def test_lines_split_anywhere_give_the_same_replies(make_client, places):
    bounds = [0, *sorted(places), len(LINES)]
    split = make_client(spelling="odd")
    replies = b"".join(split.raw("chamber", LINES[a:b]) for a, b in itertools.pairwise(bounds))
    assert replies == make_client(spelling="odd").raw("chamber", LINES)


def read(odd, channel):
    reply = odd.raw("digitizer", f"TRAC:READ? {channel}\r\n".encode())
    assert reply[:6] == b"#48000"
    assert reply[8006:] == b"\r\n"
    codes = np.frombuffer(reply[6:8006], ">i4").astype(float)
    gain, offset = (
        float(odd.ask("digitizer", f"TRAC:{each}? {channel}", "\r\n")) for each in ("GAIN", "OFFS")
    )
    return codes, codes * gain + offset


def test_the_odd_digitizer_says_the_volts_of_the_plain_one(odd, make_client):
    plain = make_client()
    for client in (odd, plain):
        client.charge()
    odd.ask("digitizer", "TRAC:SPAN VPART,20;SPAN VSHUNT,0.2;LENG 2000;STEP 1e-8;LEAD 200")
    asked = odd.ask("digitizer", "TRAC:SPAN? VPART;SPAN? VSHUNT;LENG?;STEP?;LEAD?;:SYST:ERR?")
    assert asked == '+2.000000000E+01;+2.000000000E-01;2000;+1.000000000E-08;200;0,"No error"'
    plain.ask(
        "digitizer", "SENS1:VOLT:RANG 20;:SENS2:VOLT:RANG 0.2;:SENS:SWE:POIN 2000;TINT 1e-8;OFFS:POIN -200"
    )
    plain.ask("digitizer", "INIT")
    assert odd.ask("digitizer", "TRAC:READY?;ARM;READY?") == "NO;NO"
    for client in (odd, plain):
        client.fire(10e-6)
    assert odd.ask("digitizer", "TRAC:READY?") == "YES"
    codes, volts = read(odd, "VPART")
    assert codes.min() >= 0
    assert codes.max() <= 4095
    reply = plain.raw("digitizer", b"FORM REAL,64;:TRAC? CH1\n")
    assert volts == pytest.approx(np.frombuffer(reply[7:16007], ">f8"), abs=1e-9)
    assert read(odd, "VSHUNT")[1].max() == pytest.approx(54.5e-3, rel=0.05)  # 5.45 A in 10 mohm


def test_the_odd_digitizer_clips_at_0_and_4095(odd):
    odd.charge()
    odd.ask("digitizer", "TRAC:SPAN VPART,10;SPAN VSHUNT,0.05;LENG 2000;STEP 1e-8;LEAD 200;ARM")
    odd.fire(16e-6)
    assert read(odd, "VPART")[0].max() == 4095
    odd.ask("pulser", "SOUR:PULS:POL INV")
    odd.ask("digitizer", "TRAC:ARM")
    odd.fire(16e-6)
    assert read(odd, "VPART")[0].min() == 0


def test_stopping_and_reading_too_early(odd):
    odd.charge()
    odd.ask("digitizer", "TRAC:ARM;STOP")
    odd.fire(5e-6)
    assert odd.ask("digitizer", "TRAC:READY?") == "NO"
    assert odd.ask("digitizer", "TRAC:READ? VPART;:SYST:ERR?").startswith("-230,")
    assert odd.ask("digitizer", "TRAC:READ? CH1;:SYST:ERR?").startswith("-224,")
    assert odd.ask("digitizer", "INIT;:SYST:ERR?").startswith("-113,")


def test_the_ohmmeter_puts_the_unit_behind_the_number(odd):
    odd.ask("multiplexer", "ROUT:CLOS (@101,203)")
    value, unit = odd.ask("ohmmeter", "RES?").split(" ")
    assert unit == "OHM"
    assert float(value) == pytest.approx(18e-3 * (1 + 0.00393 * 3), rel=3e-3)  # copper law, IEC 60028
    assert value.endswith("E-2")


@pytest.mark.parametrize(
    "role", ["supply", "pulser", "lcr", "bias_source", "thermometer", "multiplexer", "ohmmeter"]
)
def test_the_other_roles_answer_with_return_and_newline(odd, role):
    assert odd.raw(role, b"*OPC?\r\n") == b"1\r\n"
