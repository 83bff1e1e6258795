"""Benches for the tests: seeds are written down, nothing sleeps, and only `test_server` opens sockets."""

from collections.abc import Callable
from typing import Any

import pytest

from mock_instruments import Bench, WorldSpec

RELAYS = {"parts": {"1": 101, "2": 102}, "paths": {"pulse": 201, "bias": 202, "resistance": 203}}
MAPPING: dict[str, Any] = {
    "seed": 20261,
    "ambient_degC": 23.0,
    "parts": {
        "1": {"law": "gapped", "label": "DRUM-22-A", "inductance": 22e-6, "knee": 9.5, "resistance": 18e-3},
        "2": {"law": "powder", "label": "TOROID-47-P"},
        "3": {"law": "remanent"},
    },
    "bench": {"multiplexer": {**RELAYS, "parts": {"1": 101, "2": 102, "3": 103}}},
}


class Client:
    """Talks to a bench in memory, as one client with one conversation per role."""

    def __init__(self, bench: Bench) -> None:
        self.bench = bench
        self.world = bench.world
        self.talks = {role: bench.conversation(role) for role in bench.instruments}

    def raw(self, role: str, data: bytes) -> bytes:
        return b"".join(answer.data for answer in self.talks[role].feed(data))

    def ask(self, role: str, message: str, end: str = "\n") -> str:
        return self.raw(role, (message + end).encode()).decode("latin-1").strip("\r\n")

    def charge(self, volts: float = 12.0, relays: str = "(@101,201)") -> None:
        """Close the relays, charge the bank and make the pulser ready."""
        self.ask("multiplexer", f"ROUT:CLOS {relays}")
        self.ask("supply", f"SOUR:VOLT {volts};:SOUR:CURR 1;:OUTP 1")
        self.world.advance(2.0)
        assert self.ask("pulser", "TRIG:SOUR BUS;:INIT:CONT 1;:OUTP 1;:SYST:ERR?") == '0,"No error"'

    def fire(self, width: float) -> None:
        assert self.ask("pulser", f"SOUR:PULS:WIDT {width};*TRG;*OPC?") == "1"


@pytest.fixture
def mapping() -> dict[str, Any]:
    return {key: (dict(value) if isinstance(value, dict) else value) for key, value in MAPPING.items()}


@pytest.fixture
def client(mapping) -> Client:
    return Client(Bench(WorldSpec.from_mapping(mapping)))


@pytest.fixture
def make_client(mapping) -> Callable[..., Client]:
    """A client of a bench with some keys of the mapping changed."""
    return lambda **changes: Client(Bench(WorldSpec.from_mapping({**mapping, **changes})))
