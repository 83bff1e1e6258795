"""Through pyvisa-py and real sockets to the mock bench, in both of its spellings: each by its dialect files alone."""

import math
from collections.abc import Callable, Iterator
from typing import Any

import pytest

from drivers import (
    Dialect,
    DigitizerSetup,
    Disconnected,
    Garbled,
    Instrument,
    NoReply,
    Refused,
    Restarted,
    connect,
    open_session,
)
from mock_instruments import ROLES, Served, WorldSpec, serve

SEED = 20261
ODD = {"digitizer": "wide_digitizer", "ohmmeter": "unit_ohmmeter", "chamber": "line_chamber"}
SPELLINGS = ("plain", "odd")
PATIENCE = 0.15  # s; how long a reply that a fault keeps back is waited for


class Bench:
    """Every instrument of a served mock bench, connected on first use."""

    def __init__(self, served: Served, spelling: str, shipped: Callable[[str], Dialect]) -> None:
        self._served, self._spelling, self._shipped = served, spelling, shipped
        self._connected: dict[str, Any] = {}

    def __getattr__(self, role: str) -> Any:
        if role not in self._connected:
            plain = f"scpi_{role}"
            dialect = self._shipped(plain if self._spelling == "plain" else ODD.get(role, f"long_{role}"))
            resource = f"TCPIP::127.0.0.1::{self._served.ports[role]}::SOCKET"
            self._connected[role] = connect(role, open_session(resource, dialect, PATIENCE * 10), dialect)
        return self._connected[role]

    def impatient(self, role: str) -> Any:
        getattr(self, role)._talk.session.timeout = PATIENCE
        return getattr(self, role)

    def fault(self, role: str, kind: str) -> None:
        reply = self._served.bench.control({"do": "fault", "role": role, "kind": kind, "count": 1})
        assert "error" not in reply, reply

    def close(self) -> None:
        for instrument in self._connected.values():
            Instrument.close(instrument)  # not the multiplexer's own, which closes relays


@pytest.fixture(params=SPELLINGS)
def bench(request: pytest.FixtureRequest, shipped: Callable[[str], Dialect]) -> Iterator[Bench]:
    with serve(WorldSpec.from_mapping({"seed": SEED, "spelling": request.param})) as served:
        made = Bench(served, request.param, shipped)
        yield made
        made.close()


SETUP = DigitizerSetup(
    samples=2000, interval=1e-8, pretrigger_samples=200, voltage_range=20.0, shunt_range=0.2
)


def pulse(bench: Bench) -> Any:
    """One pulse of 5 us from a bank at 12 V through part 1."""
    bench.multiplexer.open_all()
    bench.multiplexer.close((101, 201))
    bench.supply.set(12.0, 2.0)
    bench.supply.protect(16.0, 2.0)
    bench.supply.on()
    bench._served.bench.control({"do": "advance", "seconds": 1.0})
    bench.pulser.set(5e-6)
    bench.pulser.on()
    accepted = bench.digitizer.set(SETUP)
    bench.digitizer.arm()
    bench.pulser.fire()
    return accepted, bench.digitizer.fetch()


def test_every_instrument_says_who_it_is_and_has_nothing_to_complain_of(bench: Bench) -> None:
    for role in ROLES:
        instrument = getattr(bench, role)
        assert instrument.identify().model
        assert instrument.errors() == ()
        instrument.safe()


def test_a_pulse_is_captured(bench: Bench) -> None:
    accepted, capture = pulse(bench)
    assert accepted == SETUP
    volts = capture.voltage * capture.voltage_scale + capture.voltage_offset
    amperes = (capture.shunt * capture.shunt_scale + capture.shunt_offset) / 10e-3  # 10 mohm shunt
    before, during = volts[:150], volts[250:650]
    assert abs(before.mean()) < 0.1
    # 12 V less what 10 mohm of shunt, 18 mohm of copper and the switch take at a few amperes.
    assert 11.0 < during.mean() < 12.1
    # V t / L: 12 V for 5 us in 22 uH is 2.7 A, a little less with all the resistances.
    assert 2.3 < amperes.max() < 3.0


def test_without_a_pulse_there_is_no_capture(bench: Bench) -> None:
    bench.digitizer.set(SETUP)
    bench.digitizer.arm()
    assert bench.digitizer.fetch() is None


def test_bias_and_meters(bench: Bench) -> None:
    bench.multiplexer.open_all()
    bench.multiplexer.close((101, 202))
    assert bench.multiplexer.closed((101, 102, 202)) == (101, 202)
    bench.bias_source.set(0.0)
    bench.bias_source.protect(12.0, 5.0)
    bench.bias_source.on()
    assert bench.lcr.set(1e5, 0.05) == (1e5, 0.05)
    reading = bench.lcr.read()
    assert 15e-6 < reading.inductance < 30e-6  # a part of 22 uH
    assert not reading.overload
    bench.bias_source.off()
    bench.multiplexer.open_all()
    bench.multiplexer.close((101, 203))
    assert 15e-3 < bench.ohmmeter.read() < 25e-3  # 18 mohm
    assert 15 < bench.thermometer.read(1) < 30  # a room
    bench.multiplexer.open_all()
    assert bench.multiplexer.closed() == ()


def test_a_chamber_is_set_and_asked(bench: Bench) -> None:
    assert bench.chamber.set(85.0) == 85.0
    assert bench.chamber.protect(130.0)
    bench.chamber.on()
    assert bench.chamber.setpoint() == 85.0
    before = bench.chamber.air()
    bench._served.bench.control({"do": "advance", "seconds": 600.0})
    assert bench.chamber.air() > before + 5
    bench.chamber.off()
    with pytest.raises(Refused, match=r"-222|E2 \(out of range\)"):
        bench.chamber.set(500.0)


def test_a_value_out_of_range_is_refused_by_the_instrument(bench: Bench) -> None:
    # SCPI-1999 vol. 2, 21.8: -222 is "Data out of range".
    with pytest.raises(Refused, match="-222"):
        bench.supply.set(1000.0, 1.0)
    assert bench.supply.errors() == ()  # it was read with the refusal


BROKEN = {
    "silent": NoReply,
    "deaf": NoReply,
    "half": Garbled,
    "garbage": Garbled,
    "close": Disconnected,
}


@pytest.mark.parametrize("kind", BROKEN)
@pytest.mark.parametrize("role", ["supply", "lcr", "chamber", "ohmmeter"])
def test_after_a_broken_exchange_the_next_one_works(bench: Bench, role: str, kind: str) -> None:
    read = {"supply": "measure", "lcr": "read", "chamber": "air", "ohmmeter": "read"}[role]
    instrument = bench.impatient(role)
    getattr(instrument, read)()
    bench.fault(role, kind)
    with pytest.raises(BROKEN[kind]) as caught:
        getattr(instrument, read)()
    assert str(caught.value).startswith(f"{role} (TCPIP::127.0.0.1::")
    getattr(instrument, read)()


@pytest.mark.parametrize("kind", ["half", "silent", "garbage", "close"])
def test_half_a_capture_is_not_a_capture(bench: Bench, kind: str) -> None:
    pulse(bench)
    bench.digitizer.arm()
    bench.pulser.fire()
    assert bench.digitizer._is_done()
    digitizer = bench.impatient("digitizer")
    bench.fault("digitizer", kind)
    with pytest.raises((Garbled, NoReply, Disconnected)):
        digitizer._talk.carry_out("fetch", sample_count=SETUP.samples)
    assert digitizer.fetch() is not None  # the capture is still there


def test_an_error_in_the_queue_is_seen_with_the_next_message(bench: Bench) -> None:
    bench.lcr.set(1e5, 0.05)
    bench.fault("lcr", "error")
    with pytest.raises(Refused, match="-240"):  # SCPI-1999 vol. 2, 21.8: hardware error
        bench.lcr.read()
    bench.lcr.read()


def test_an_overload_is_a_reading(bench: Bench) -> None:
    bench.fault("lcr", "overload")
    assert bench.lcr.read().overload
    bench.fault("ohmmeter", "overload")
    assert not math.isfinite(bench.ohmmeter.read())


def test_a_restart_in_mid_run_is_noticed(bench: Bench) -> None:
    bench.lcr.set(2e5, 0.05)
    bench.fault("lcr", "restart")
    with pytest.raises(Disconnected):  # its connection went with its power
        bench.lcr.read()
    with pytest.raises(Restarted):
        bench.lcr.read()
    assert bench.lcr.set(2e5, 0.05)[0] == 2e5
    bench.lcr.read()
    bench.supply.measure()
    bench.fault("supply", "restart")
    with pytest.raises(Disconnected):
        bench.supply.restarted()
    assert bench.supply.restarted()
    assert not bench.supply.restarted()


def test_another_unit_has_another_identity(bench: Bench) -> None:
    before = bench.chamber.identify()
    bench.fault("chamber", "identity")
    bench.chamber.air()
    assert bench.chamber.identify() != before
