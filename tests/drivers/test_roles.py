"""Each role on a scripted session: what its methods send, what they bring, what they refuse to believe."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from drivers import (
    CLOSED,
    SILENCE,
    Dialect,
    DigitizerSetup,
    Disconnected,
    Garbled,
    Identity,
    NoReply,
    Refused,
    Restarted,
    ScriptedSession,
    connect,
)
from drivers.needs import ROLES

OK = ';0,"No error";0'
TAIL = ";:SYST:ERR?;*ESR?"


@pytest.fixture
def role(shipped: Callable[[str], Dialect]) -> Callable[..., Any]:
    """Makes the object of a role with its plain dialect (or another) on a script."""

    def make(name: str, *script: tuple, dialect: str | None = None, **changes: object) -> Any:
        chosen = shipped(dialect or f"scpi_{name}").model_copy(update=changes)
        end = {"CR": b"\r", "LF": b"\n", "CRLF": b"\r\n"}[chosen.terminator.send]
        make.session = ScriptedSession(script, role=name, send=end, reply=end)
        return connect(name, make.session, chosen)

    return make


# ---- all


def test_the_four_fields_of_an_identity_are_told_apart(role) -> None:
    supply = role("supply", ("*IDN?", "Mock bench,SUPPLY,0003,1.0"))
    assert supply.identify() == Identity("Mock bench", "SUPPLY", "0003", "1.0", "Mock bench,SUPPLY,0003,1.0")


def test_an_identity_without_fields_is_a_model(role) -> None:
    chamber = role("chamber", ("ID", "CHAMBER MOCK 1"), dialect="line_chamber")
    assert chamber.identify() == Identity("", "CHAMBER MOCK 1", "", "", "CHAMBER MOCK 1")


def test_the_error_queue_is_emptied_oldest_first(role) -> None:
    supply = role(
        "supply",
        ("SYST:ERR?", '-113,"Undefined header"'),
        ("SYST:ERR?", '-222,"Data out of range"'),
        ("SYST:ERR?", '0,""'),
    )
    assert supply.errors() == ('-113,"Undefined header"', '-222,"Data out of range"')


def test_a_queue_that_never_empties_ends(role) -> None:
    supply = role("supply", *[("SYST:ERR?", '-350,"Queue overflow"')] * 50)
    assert len(supply.errors()) == 50


def test_what_a_dialect_adds_is_listed(role) -> None:
    assert "restart detection" in role("supply").capabilities()
    assert "protect" in role("supply").capabilities()
    assert "restart detection" not in role("chamber", dialect="line_chamber").capabilities()


def test_a_dialect_of_another_role_is_refused(shipped) -> None:
    with pytest.raises(ValueError, match="supply: its dialect is one for a pulser"):
        connect("supply", ScriptedSession([]), shipped("scpi_pulser"))


SAFE = "OUTP 0;:SOUR:VOLT 0;:SOUR:CURR 0" + TAIL


def test_safe_needs_nothing_but_a_connection(role) -> None:
    supply = role("supply", (SAFE, '0,"No error";128'))
    supply.safe()
    assert role.session.is_finished


def test_safe_is_tried_message_by_message_after_a_refusal(role) -> None:
    supply = role(
        "supply",
        (SAFE, '-222,"Data out of range";16'),
        ("SYST:ERR?", '0,""'),
        ("OUTP 0" + TAIL, '0,"";0'),
        ("SOUR:VOLT 0" + TAIL, '-222,"Data out of range";16'),
        ("SYST:ERR?", '0,""'),
        ("SOUR:CURR 0" + TAIL, '0,"";0'),
    )
    with pytest.raises(Refused, match="SOUR:VOLT 0"):
        supply.safe()
    assert role.session.is_finished  # the message behind the refused one was sent all the same


@pytest.mark.parametrize("broken", [CLOSED, b"0,", "rubbish;0"])
def test_safe_survives_one_broken_exchange(role, broken) -> None:
    supply = role(
        "supply",
        (SAFE, broken),
        ("OUTP 0" + TAIL, '0,"";0'),
        ("SOUR:VOLT 0" + TAIL, '0,"";0'),
        ("SOUR:CURR 0" + TAIL, '0,"";0'),
    )
    supply.safe()
    assert role.session.reopened == 1


def test_safe_does_not_mind_a_restart(role) -> None:
    supply = role("supply", ("*ESR?", "0"), (SAFE, '0,"";128'))
    supply.restarted()
    supply.safe()


BLIND = [("OUTP 0", SILENCE), ("SOUR:VOLT 0", SILENCE), ("SOUR:CURR 0", SILENCE)]


def test_safe_is_told_to_one_that_answers_nothing_and_said_to_be_unconfirmed(role) -> None:
    supply = role("supply", (SAFE, SILENCE), ("SYST:ERR?", SILENCE), *BLIND)
    with pytest.raises(NoReply):
        supply.safe()
    assert role.session.is_finished


def test_safe_is_told_to_one_that_answers_rubbish_only(role) -> None:
    supply = role("supply", (SAFE, "rubbish;0"), ("OUTP 0" + TAIL, "rubbish;0"), *BLIND)
    with pytest.raises(Garbled):
        supply.safe()
    assert role.session.is_finished


def test_reset_waits_until_it_is_done(role) -> None:
    role("lcr", ("*RST;*CLS;*OPC?" + TAIL, '1;0,"";0')).reset()
    assert role.session.is_finished


def test_reconnecting_makes_a_new_connection(role) -> None:
    role("lcr").reconnect()
    assert role.session.reopened == 1


# ---- sources


def test_a_supply(role) -> None:
    supply = role(
        "supply",
        ("SOUR:VOLT 12;:SOUR:CURR 1;:SOUR:VOLT?;:SOUR:CURR?" + TAIL, "12.003;0.999" + OK),
        (
            "SOUR:VOLT:PROT 16;:SOUR:CURR:PROT 2;:SOUR:VOLT:PROT?;:SOUR:CURR:PROT?" + TAIL,
            "16;2" + OK,
        ),
        ("OUTP 1;:OUTP?" + TAIL, "1" + OK),
        ("MEAS:VOLT?;:MEAS:CURR?" + TAIL, "11.98;2.5E-2" + OK),
        ("OUTP 0;:OUTP?" + TAIL, "0" + OK),
    )
    assert supply.set(12, 1) == (12.003, 0.999)
    assert supply.protect(16, 2) is True
    supply.on()
    assert supply.measure() == (11.98, 0.025)
    supply.off()
    assert role.session.is_finished


@pytest.mark.parametrize("got", ["10", "0", "12.2", "9.91E37", "9.9E37"])
def test_a_supply_set_to_something_else_is_refused(role, got: str) -> None:
    line = "SOUR:VOLT 12;:SOUR:CURR 1;:SOUR:VOLT?;:SOUR:CURR?" + TAIL
    with pytest.raises(Refused, match="asked to set voltage to 12"):
        role("supply", (line, f"{got};1" + OK)).set(12, 1)


def test_an_output_that_stays_as_it_was_is_refused(role) -> None:
    with pytest.raises(Refused, match="asked to switch on, it says that it is off"):
        role("supply", ("OUTP 1;:OUTP?" + TAIL, "0" + OK)).on()
    with pytest.raises(Refused, match="asked to switch off, it says that it is on"):
        role("supply", ("OUTP 0;:OUTP?" + TAIL, "1" + OK)).off()


def test_a_role_without_protection_says_so(role, shipped) -> None:
    dialect = shipped("scpi_supply")
    without = {name: messages for name, messages in dialect.intents.items() if name != "protect"}
    assert role("supply", intents=without).protect(16, 2) is False


PULSE = (
    "SOUR:FUNC PULS;:SOUR:PULS:COUN 1;:SOUR:PULS:WIDT {};:SOUR:PULS:POL {};:TRIG:SOUR BUS;:INIT:CONT 1"
    ";:SOUR:PULS:WIDT?;:SOUR:PULS:POL?" + TAIL
)


def test_a_pulser(role) -> None:
    pulser = role(
        "pulser",
        (PULSE.format("2e-06", "NORM"), "2.0E-6;NORM" + OK),
        (PULSE.format("2.01e-06", "INV"), "2.01E-6;INV" + OK),
        ("SOUR:CURR:PROT 17;:SOUR:CURR:PROT?" + TAIL, "17" + OK),
        ("OUTP 1;:OUTP?" + TAIL, "1" + OK),
        ("*TRG;*OPC?" + TAIL, "1" + OK),
        ("OUTP 0;:OUTP?" + TAIL, "0" + OK),
    )
    assert pulser.set(2e-6) == 2e-6
    assert pulser.set(2.01e-6, polarity=-1) == 2.01e-6
    assert pulser.protect(17) is True
    pulser.on()
    pulser.fire()
    pulser.off()
    assert role.session.is_finished


def test_a_pulse_of_the_wrong_sign_is_refused(role) -> None:
    with pytest.raises(Refused, match="inverted polarity, it says normal"):
        role("pulser", (PULSE.format("2e-06", "INV"), "2E-6;NORM" + OK)).set(2e-6, polarity=-1)
    with pytest.raises(ValueError, match=r"\+1 or -1"):
        role("pulser").set(2e-6, polarity=0)


def test_a_pulse_that_is_never_over_is_no_reply(role) -> None:
    with pytest.raises(NoReply):
        role("pulser", ("*TRG;*OPC?" + TAIL, SILENCE)).fire()


def test_an_ignored_trigger_is_refused(role) -> None:
    pulser = role("pulser", ("*TRG;*OPC?" + TAIL, '1;-211,"Trigger ignored";16'), ("SYST:ERR?", '0,""'))
    with pytest.raises(Refused, match="Trigger ignored"):
        pulser.fire()


def test_a_bias_source(role) -> None:
    bias = role(
        "bias_source",
        ("SOUR:CURR 2.5;:SOUR:CURR?" + TAIL, "2.5" + OK),
        ("SOUR:CURR:PROT 12;:SOUR:VOLT:PROT 5;:SOUR:CURR:PROT?;:SOUR:VOLT:PROT?" + TAIL, "12;5" + OK),
        ("OUTP 1;:OUTP?" + TAIL, "ON" + OK),
        ("MEAS:CURR?;:MEAS:VOLT?" + TAIL, "2.4999;0.045" + OK),
        ("OUTP 0;:OUTP?" + TAIL, "OFF" + OK),
    )
    assert bias.set(2.5) == 2.5
    assert bias.protect(12, 5) is True
    bias.on()
    assert bias.measure() == (2.4999, 0.045)
    bias.off()


def test_a_source_that_restarted_in_mid_run_is_not_believed(role) -> None:
    line = "MEAS:CURR?;:MEAS:VOLT?" + TAIL
    bias = role("bias_source", (line, "2;0.1" + OK), (line, '0;0;0,"";128'), (line, "0;0" + OK))
    bias.measure()
    with pytest.raises(Restarted, match="settings are lost"):
        bias.measure()
    assert bias.measure() == (0.0, 0.0)  # said once


# ---- meters


def test_an_lcr_meter(role) -> None:
    line = (
        'SENS:FUNC "FIMP";:CALC1:FORM LS;:CALC2:FORM RS;:SOUR:FREQ 100000;:SOUR:VOLT 0.05;:SOUR:FREQ?;:SOUR:VOLT?'
        + TAIL
    )
    lcr = role(
        "lcr",
        (line, "1.0E5;0.05" + OK),
        ("READ?" + TAIL, "2.2E-5,1.8E-2" + OK),
        ("READ?" + TAIL, "9.9E37,9.9E37" + OK),
    )
    assert lcr.set(1e5, 0.05) == (1e5, 0.05)
    reading = lcr.read()
    assert (reading.inductance, reading.resistance, reading.overload) == (2.2e-5, 1.8e-2, False)
    assert lcr.read().overload


@pytest.mark.parametrize("reply", ["2.2E-5", "2.2E-5,1,2", "2.2E-5,", "2.2E-5 H,1"])
def test_an_lcr_reading_of_another_shape_is_garbled(role, reply: str) -> None:
    with pytest.raises(Garbled):
        role("lcr", ("READ?" + TAIL, reply + OK)).read()


def test_a_thermometer_reads_the_channel_of_a_part(role) -> None:
    thermometer = role(
        "thermometer", ("MEAS:TEMP? (@2)" + TAIL, "-40.02" + OK), ("MEAS:TEMP? (@1)" + TAIL, "9.91E37" + OK)
    )
    assert thermometer.read(2) == -40.02
    assert math.isnan(thermometer.read(1))


def test_an_ohmmeter_in_both_spellings(role) -> None:
    assert role("ohmmeter", ("MEAS:FRES?" + TAIL, "1.8012E-2" + OK)).read() == 0.018012
    line = "RES?;:SYSTem:ERRor?;*ESR?"
    assert role("ohmmeter", (line, "1.8012E-2 OHM" + OK), dialect="unit_ohmmeter").read() == 0.018012
    assert role("ohmmeter", (line, "1.5 MOHM" + OK), dialect="unit_ohmmeter").read() == 1.5e6
    assert role("ohmmeter", (line, "9.9E37 OHM" + OK), dialect="unit_ohmmeter").read() == math.inf


# ---- chamber


def test_a_chamber(role) -> None:
    chamber = role(
        "chamber",
        ("SOUR:TEMP -40;:SOUR:TEMP?" + TAIL, "-40" + OK),
        ("SOUR:TEMP:PROT:HIGH 130;:SOUR:TEMP:PROT:HIGH?" + TAIL, "130" + OK),
        ("OUTP 1;:OUTP?" + TAIL, "1" + OK),
        ("SOUR:TEMP?" + TAIL, "-40" + OK),
        ("MEAS:TEMP?" + TAIL, "25.13" + OK),
        ("OUTP 0" + TAIL, '0,"";0'),
    )
    assert chamber.set(-40) == -40.0
    assert chamber.protect(130) is True
    chamber.on()
    assert chamber.setpoint() == -40.0
    assert chamber.air() == 25.13
    chamber.safe()


def test_a_chamber_with_a_line_protocol(role) -> None:
    chamber = role(
        "chamber",
        ("S=-40.00", "OK"),
        ("S", "S=-040.00"),
        ("H=130.0", "OK"),
        ("GO", "OK"),
        ("T", "T=+025.13"),
        ("HALT", "OK"),
        ("E", "E0"),
        dialect="line_chamber",
    )
    assert chamber.set(-40) == -40.0
    assert chamber.protect(130) is True
    chamber.on()
    assert chamber.air() == 25.13
    chamber.safe()
    assert chamber.errors() == ()
    assert chamber.restarted() is False


# ---- multiplexer


def test_a_multiplexer_makes_sure_of_its_relays(role) -> None:
    relays = role(
        "multiplexer",
        ("ROUT:OPEN:ALL" + TAIL, '0,"";0'),
        ("ROUT:CLOS (@101,201)" + TAIL, '0,"";0'),
        ("ROUT:CLOS? (@101,201)" + TAIL, "1,1" + OK),
        ("ROUT:CLOS? (@101,201)" + TAIL, "1,0" + OK),
        ("ROUT:CLOS? (@102,101)" + TAIL, "0,1" + OK),
    )
    relays.open_all()
    relays.close((101, 201))
    assert relays.closed() == (101,)
    assert relays.closed((102, 101)) == (101,)


def test_a_relay_that_stays_open_is_refused(role) -> None:
    relays = role(
        "multiplexer", ("ROUT:CLOS (@101,201)" + TAIL, '0,"";0'), ("ROUT:CLOS? (@101,201)" + TAIL, "1,0" + OK)
    )
    with pytest.raises(Refused, match=r"\[201\] stayed open"):
        relays.close((101, 201))


def test_a_multiplexer_may_answer_with_the_closed_relays(role, shipped) -> None:
    changed = shipped("scpi_multiplexer").model_dump(by_alias=True, exclude_defaults=True)
    changed["intents"]["closed"] = [{"ask": "ROUT:CLOS:STAT?", "gives": "relays", "as": "numbers"}]
    intents = Dialect.model_validate(changed).intents
    relays = role(
        "multiplexer",
        ("ROUT:CLOS:STAT?" + TAIL, "(@201,101)" + OK),
        ("ROUT:CLOS:STAT?" + TAIL, "(@)" + OK),
        intents=intents,
    )
    assert relays.closed((101, 102, 201)) == (101, 201)
    assert relays.closed((101,)) == ()


def test_letting_go_of_a_multiplexer_moves_no_relay(role) -> None:
    relays = role("multiplexer")
    relays.close()
    assert role.session.sent == []


# ---- digitizer

SETUP = DigitizerSetup(samples=4, interval=1e-8, pretrigger_samples=1, voltage_range=20.0, shunt_range=0.2)
SET = (
    "SENS1:VOLT:RANG 20;:SENS2:VOLT:RANG 0.2;:SENS:SWE:POIN 4;:SENS:SWE:TINT 1e-08;:SENS:SWE:OFFS:POIN -1;:TRIG:SOUR EXT"
    ";:FORM INT,16;:FORM:BORD SWAP;:SENS1:VOLT:RANG?;:SENS2:VOLT:RANG?;:SENS:SWE:POIN?;:SENS:SWE:TINT?;:SENS:SWE:OFFS:POIN?"
    + TAIL
)
SET_REPLY = "20;0.2;4;1.0E-8;-1" + OK
STATE = "STAT:OPER:COND?" + TAIL
FETCH = "TRAC? CH1;:TRAC? CH2" + TAIL
VOLTAGE, SHUNT = [0, 16, -32768, 32752], [10, 2570, -1, 2]  # 10 and 2570 are LF and LF LF on the wire


def block(codes: list[int], dtype: str) -> bytes:
    data = np.array(codes, dtype=dtype).tobytes()
    return b"#2%02d" % len(data) + data


def both(dtype: str = "<i2", tail: bytes = b';0,"No error";0\n') -> bytes:
    return block(VOLTAGE, dtype) + b";" + block(SHUNT, dtype) + tail


def test_a_digitizer_brings_both_channels_in_one_round_trip(role) -> None:
    digitizer = role(
        "digitizer", (SET, SET_REPLY), ("ABOR;:INIT" + TAIL, '0,"";0'), (STATE, "0" + OK), (FETCH, both())
    )
    assert digitizer.set(SETUP) == SETUP
    digitizer.arm()
    capture = digitizer.fetch()
    assert capture.voltage.tolist() == VOLTAGE
    assert capture.shunt.tolist() == SHUNT
    assert capture.voltage.dtype == np.int16
    # volts = code * range / 32768: half of the positive codes' end is half the range
    assert 16384 * capture.voltage_scale + capture.voltage_offset == 10.0
    assert 16384 * capture.shunt_scale + capture.shunt_offset == pytest.approx(0.1, rel=1e-15)
    assert (capture.interval, capture.first) == (1e-8, -1e-8)
    # Left-justified in 16 bits, an 8-bit converter ends at 127 * 256 and a 12-bit one at 2047 * 16.
    assert capture.code_min > -32768
    assert 32000 < capture.code_max <= 127 * 256 < 2047 * 16
    assert role.session.is_finished


def test_no_trigger_is_no_capture(role) -> None:
    digitizer = role("digitizer", (SET, SET_REPLY), (STATE, "32" + OK))
    digitizer.set(SETUP)
    assert digitizer.fetch() is None


def test_a_digitizer_that_still_measures_is_waited_for(role) -> None:
    digitizer = role(
        "digitizer", (SET, SET_REPLY), *[(STATE, "16" + OK)] * 3, (STATE, "0" + OK), (FETCH, both())
    )
    digitizer.set(SETUP)
    assert digitizer.fetch() is not None


def test_a_digitizer_that_never_ends_is_no_reply(role) -> None:
    digitizer = role("digitizer", (SET, SET_REPLY), *[(STATE, "16" + OK)] * 1000)
    digitizer.set(SETUP)
    with pytest.raises(NoReply, match="still measuring"):
        digitizer.fetch()


@pytest.mark.parametrize(
    ("reply", "error"),
    [
        ('-230,"Data corrupt or stale";16', Refused),  # no block at all, and the error queue says why
        (block(VOLTAGE, "<i2") + b';-230,"Data corrupt or stale";16\n', Refused),
        (both()[:9], Garbled),  # half a block
        (both()[:15], Garbled),  # half of the second
        (both(tail=b"\n"), Garbled),  # the error queue's reply is missing
        (b"#A12345678\n", Garbled),
        (b'#15hallo;#15hallo;0,"";0\n', Garbled),  # no whole number of samples
        (block([1, 2], "<i2") + b";" + block([1, 2], "<i2") + b';0,"";0\n', Garbled),  # fewer than were set
        (block(VOLTAGE, "<i2") + b"," + block(SHUNT, "<i2") + b';0,"";0\n', Garbled),
        (CLOSED, Disconnected),
        (SILENCE, NoReply),
    ],
)
def test_a_capture_that_is_not_whole_is_an_error_and_then_a_new_start(role, reply, error) -> None:
    after = [("SYST:ERR?", '0,""')] if error in (Refused, NoReply) else []
    digitizer = role(
        "digitizer",
        (SET, SET_REPLY),
        (STATE, "0" + OK),
        (FETCH, reply),
        *after,
        (STATE, "0" + OK),
        (FETCH, both()),
    )
    digitizer.set(SETUP)
    with pytest.raises(error):
        digitizer.fetch()
    assert digitizer.fetch().voltage.tolist() == VOLTAGE
    assert role.session.reopened == (error is not Refused)


def test_what_the_digitizer_made_of_the_settings_comes_back(role) -> None:
    digitizer = role("digitizer", (SET, "50;0.5;4;2.0E-8;-1" + OK))
    accepted = digitizer.set(SETUP)
    assert (accepted.voltage_range, accepted.shunt_range, accepted.interval) == (50.0, 0.5, 2e-8)


@pytest.mark.parametrize("reply", ["0;0.2;4;1E-8;-1", "20;0.2;4;9.91E37;-1", "20;0.2;0;1E-8;-1"])
def test_settings_that_cannot_be_are_refused(role, reply: str) -> None:
    with pytest.raises((Refused, Garbled)):
        role("digitizer", (SET, reply + OK)).set(SETUP)


def test_a_digitizer_that_restarted_has_to_be_set_anew(role) -> None:
    arm = "ABOR;:INIT" + TAIL
    digitizer = role(
        "digitizer", (SET, SET_REPLY), (arm, '0,"";128'), (SET, SET_REPLY), (STATE, "0" + OK), (FETCH, both())
    )
    digitizer.set(SETUP)
    with pytest.raises(Restarted):
        digitizer.arm()
    with pytest.raises(RuntimeError, match="set before"):
        digitizer.fetch()
    digitizer.set(SETUP)
    assert digitizer.fetch() is not None


def test_nothing_can_be_fetched_before_it_is_known_what_it_means(role) -> None:
    with pytest.raises(RuntimeError, match="set before"):
        role("digitizer").fetch()


def test_a_wide_digitizer_is_asked_for_its_scale(role) -> None:
    tail = ";:SYSTem:ERRor?;*ESR?"
    digitizer = role(
        "digitizer",
        (
            "TRAC:SPAN VPART,20;:TRAC:SPAN VSHUNT,0.2;:TRAC:LENG 4;:TRAC:STEP 1e-08;:TRAC:LEAD 1"
            ";:TRAC:SPAN? VPART;:TRAC:SPAN? VSHUNT;:TRAC:LENG?;:TRAC:STEP?;:TRAC:LEAD?" + tail,
            "20;0.2;4;1E-8;1" + OK,
        ),
        (
            "TRAC:GAIN? VPART;:TRAC:OFFS? VPART;:TRAC:GAIN? VSHUNT;:TRAC:OFFS? VSHUNT" + tail,
            "9.765625E-3;-20;9.765625E-5;-0.2" + OK,
        ),
        ("TRAC:READY?" + tail, "YES" + OK),
        (
            "TRAC:READ? VPART;:TRAC:READ? VSHUNT" + tail,
            block([0, 2048, 4095, 1], ">i4") + b";" + block([2048] * 4, ">i4") + b';0,"";0\r\n',
        ),
        dialect="wide_digitizer",
    )
    digitizer.set(SETUP)
    capture = digitizer.fetch()
    assert capture.voltage.tolist() == [0, 2048, 4095, 1]
    # offset binary of 12 bits: code 0 is -20 V, code 2048 is 0 V
    assert capture.voltage_scale * 2048 + capture.voltage_offset == 0.0
    assert capture.shunt_scale * 0 + capture.shunt_offset == -0.2
    assert capture.code_min >= 0
    assert 2048 < capture.code_max <= 4095


def test_a_flag_alone_cannot_tell_waiting_from_measuring(role) -> None:
    line = "TRAC:READY?;:SYSTem:ERRor?;*ESR?"
    digitizer = role("digitizer", *[(line, "NO" + OK)] * 21, dialect="wide_digitizer")
    digitizer._setup, digitizer._scaling = SETUP, object()
    assert digitizer.fetch() is None


@pytest.mark.parametrize(
    ("of", "volts"), [("real32", block([0, 10, -20, 9.9e37], "<f4")), ("ascii", b"0,1.0E1,-20,9.9E37")]
)
def test_samples_in_volts_are_coded_without_loss(role, shipped, of: str, volts: bytes) -> None:
    changed = shipped("scpi_digitizer").model_dump(by_alias=True, exclude_defaults=True)
    del changed["codes"]
    for message in changed["intents"]["fetch"]:
        message |= {"of": of}
    dialect = Dialect.model_validate(changed)
    digitizer = role(
        "digitizer",
        (SET, SET_REPLY),
        (STATE, "0" + OK),
        (FETCH, volts + b";" + volts + b';0,"No error";0\n'),
        intents=dialect.intents,
        codes=None,
    )
    digitizer.set(SETUP)
    capture = digitizer.fetch()
    assert (capture.voltage[:3] * capture.voltage_scale).tolist() == [0.0, 10.0, -20.0]
    assert capture.voltage[3] >= capture.code_max  # an infinity counts as cut off
    assert capture.voltage[2] <= capture.code_min  # so does the end of the range


def test_every_role_of_the_table_has_a_class_and_a_plain_dialect(role) -> None:
    for name in ROLES:
        assert role(name).role == name
