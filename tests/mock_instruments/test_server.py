"""The little that goes through real sockets, in this process and as one of its own."""

import json
import socket
import subprocess
import sys
from pathlib import Path

import pytest

from mock_instruments import ROLES, WorldSpec, launch, serve

ROOT = Path(__file__).resolve().parents[2]


class Line:
    """One TCP client that speaks in lines."""

    def __init__(self, port):
        self.socket = socket.create_connection(("127.0.0.1", port), timeout=10.0)
        self.file = self.socket.makefile("rwb")

    def say(self, text):
        self.file.write(text.encode() + b"\n")
        self.file.flush()

    def ask(self, text):
        self.say(text)
        return self.file.readline().decode().rstrip("\r\n")

    def tell(self, **request):
        return json.loads(self.ask(json.dumps(request)))

    def close(self):
        self.file.close()
        self.socket.close()


@pytest.fixture
def dial():
    """Opens lines and closes them in the end."""
    lines = []

    def open_line(port):
        lines.append(Line(port))
        return lines[-1]

    yield open_line
    for line in lines:
        line.close()


@pytest.fixture
def served(mapping):
    with serve(WorldSpec.from_mapping(mapping)) as served:
        yield served


def test_every_role_has_a_port_of_its_own(served, dial):
    assert set(served.ports) == set(ROLES)
    assert len({*served.ports.values(), served.control}) == len(ROLES) + 1
    for role, port in served.ports.items():
        assert dial(port).ask("*IDN?").startswith("Mock bench,"), role


def test_many_clients_see_one_instrument(served, dial):
    first, second = dial(served.ports["supply"]), dial(served.ports["supply"])
    first.say("SOUR:VOLT 7")
    assert first.ask("*OPC?") == "1"
    assert float(second.ask("SOUR:VOLT?")) == 7.0


def test_the_control_socket_moves_time_and_tells_the_ledger(served, dial):
    control = dial(served.control)
    assert control.tell(do="now") == {"now": 0.0}
    assert control.tell(do="advance", seconds=1.5) == {"now": 1.5}
    ledger = control.tell(do="ledger")
    assert ledger["largest"]["current"] == 0.0
    assert ledger["on"]["supply"] is False
    assert "error" in json.loads(control.ask("this is not JSON"))
    assert "error" in json.loads(control.ask("[1]"))
    assert control.tell(do="now") == {"now": 1.5}  # still there


@pytest.mark.parametrize("kind", ["close", "restart"])
def test_a_fault_ends_the_connection_and_the_port_stays(served, dial, kind):
    control, lcr = dial(served.control), dial(served.ports["lcr"])
    control.tell(do="fault", role="lcr", kind=kind)
    assert lcr.ask("*IDN?") == ""
    assert dial(served.ports["lcr"]).ask("*IDN?").startswith("Mock bench,LCR")


def test_closing_ends_threads_and_connections(mapping):
    served = serve(WorldSpec.from_mapping(mapping))
    line = Line(served.ports["supply"])
    assert line.ask("*OPC?") == "1"
    served.close()
    assert line.file.read() == b""
    line.close()
    assert not any(thread.is_alive() for thread in served._threads)
    with pytest.raises(OSError, match=r"refused|reset"):
        socket.create_connection(("127.0.0.1", served.ports["supply"]), timeout=2.0)


def test_a_bench_of_its_own_outlives_its_clients_until_it_is_told_to_quit(mapping, dial):
    launched = launch(mapping)
    try:
        first = dial(launched.ports["supply"])
        first.say("SOUR:VOLT 9")
        assert first.ask("*OPC?") == "1"
        first.close()
        again = dial(launched.ports["supply"])
        assert float(again.ask("SOUR:VOLT?")) == 9.0
        assert dial(launched.control).tell(do="quit")["quit"] is True
        assert launched.process.wait(timeout=20.0) == 0
    finally:
        if launched.process.poll() is None:
            launched.process.terminate()
            launched.process.wait()


def test_a_bench_without_clients_ends_by_itself(mapping):
    launched = launch(mapping, patience=0.2)
    assert launched.process.wait(timeout=20.0) == 0


def test_a_bench_that_cannot_be_read_says_why(mapping):
    with pytest.raises(RuntimeError, match="no law 'glass'"):
        launch({**mapping, "parts": {"1": {"law": "glass"}}})


def test_the_module_reads_standard_input_and_prints_one_line(mapping):
    done = subprocess.run(
        [sys.executable, "-m", "mock_instruments", "--patience", "0.1"],
        input=json.dumps(mapping), capture_output=True, text=True, cwd=ROOT, timeout=30.0, check=False,
    )  # fmt: skip
    assert done.returncode == 0
    assert done.stderr == ""
    (line,) = done.stdout.splitlines()
    told = json.loads(line)
    assert set(told["ports"]) == set(ROLES)
    assert isinstance(told["control"], int)


def test_the_same_messages_over_sockets_get_the_replies_of_memory(served, dial, client):
    chat = ["*ESR?", "MEAS:TEMP? (@1,2)", "MEAS:TEMP? (@1)", "SYST:ERR?"]
    line = dial(served.ports["thermometer"])
    assert [line.ask(each) for each in chat] == [client.ask("thermometer", each) for each in chat]
