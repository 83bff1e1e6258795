"""The runner killed or stopped while the bench is hot: the watchdog makes it safe, says so, and in time.

Real processes and sockets: runner, watchdog and simulated bench each on their own. Times are wall clock; the bars are 3 s
after SIGKILL, and the heartbeat time (2 s here, and half a second to walk) after SIGSTOP.
"""

import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from runner.record import open_run

ROOT = Path(__file__).resolve().parents[2]
PATIENCE = 2.0
LONGEST = 60.0  # s for a runner to get where it shall be killed

# Carries the plan out and says where the control socket of its bench is.
RUNNER = """
import sys
from pathlib import Path
import runner.sweep.opening as opening
from runner.plan import load_plan
from runner.sweep import carry_out
launch = opening.launch
def tell(mapping):
    launched = launch(mapping)
    print(launched.control, flush=True)
    return launched
opening.launch = tell
carry_out(load_plan(Path(sys.argv[1])), Path(sys.argv[2]))
"""

Write = Callable[..., Path]


class Ledger:
    """Asks the simulated bench what is on."""

    def __init__(self, port: int) -> None:
        self._socket = socket.create_connection(("127.0.0.1", port), timeout=10)
        self._lines = self._socket.makefile("rwb")

    def ask(self, do: str) -> dict[str, Any]:
        self._lines.write(json.dumps({"do": do}).encode() + b"\n")
        self._lines.flush()
        reply: dict[str, Any] = json.loads(self._lines.readline())
        return reply

    def until(
        self, claim: Callable[[dict[str, Any]], bool], *, within: float
    ) -> tuple[float, dict[str, Any]]:
        """How long it took until the claim held [s], and the ledger then."""
        start = time.monotonic()
        while True:
            ledger = self.ask("ledger")
            took = time.monotonic() - start
            if claim(ledger):
                return took, ledger
            assert took < within, f"not within {within} s: {ledger['on']}"
            time.sleep(0.005)

    def close(self) -> None:
        self.ask("quit")
        self._lines.close()
        self._socket.close()


@contextmanager
def running(plan: Path, folder: Path) -> Iterator[tuple["subprocess.Popen[bytes]", Ledger]]:
    process = subprocess.Popen(
        [sys.executable, "-c", RUNNER, str(plan), str(folder)],
        stdout=subprocess.PIPE,
        env=os.environ | {"PYTHONPATH": str(ROOT), "KNEEMAP_PATIENCE": str(PATIENCE)},
    )
    assert process.stdout is not None
    ledger = Ledger(int(process.stdout.readline()))
    try:
        yield process, ledger
    finally:
        process.kill()
        process.wait()
        process.stdout.close()
        ledger.close()


def in_a_pulse_train(ledger: dict[str, Any]) -> bool:
    return bool(ledger["on"]["pulser"]) and ledger["pulses"] >= 5


def in_a_bias_ramp(ledger: dict[str, Any]) -> bool:
    return bool(ledger["on"]["bias"]) and ledger["on"]["bias_current"] > 1.0


def outputs_are_off(ledger: dict[str, Any]) -> bool:
    on = ledger["on"]
    return not (on["supply"] or on["pulser"] or on["bias"]) and on["bias_current"] < 1e-3


def is_all_safe(ledger: dict[str, Any]) -> bool:
    on = ledger["on"]
    return (
        outputs_are_off(ledger)
        and on["bank_voltage"] < 1.0
        and on["relays"] == []
        and on["chamber_setpoint"] == 25.0
    )


def try_once(
    plan: Path, folder: Path, number: signal.Signals, moment: Callable[[dict[str, Any]], bool], bar: float
) -> None:
    with running(plan, folder) as (process, ledger):
        ledger.until(moment, within=LONGEST)
        os.kill(process.pid, number)
        ledger.until(outputs_are_off, within=bar)
        _, at_last = ledger.until(is_all_safe, within=10.0)
        assert at_last["relay_moves_under_current"] == 0
        assert at_last["relay_moves_on_charged_bank"] == 0
        assert process.wait(timeout=5.0) == -signal.SIGKILL  # a hung one was killed, and cannot wake up
        said = wait_for_event(folder)
    assert ("died" if number == signal.SIGKILL else "no sign of life") in said
    assert "safe state reached" in said


def wait_for_event(folder: Path) -> str:
    """The watchdog's own event; it is written right after the bench is safe."""
    end = time.monotonic() + 10.0
    while time.monotonic() < end:
        with open_run(folder) as run:
            found = [event.text for event in run.events if event.kind == "watchdog"]
        if found:
            return found[-1]
        time.sleep(0.1)
    raise AssertionError("the watchdog wrote no event")


TRIALS = [
    (signal.SIGKILL, in_a_pulse_train, 3.0),
    (signal.SIGKILL, in_a_bias_ramp, 3.0),
    (signal.SIGSTOP, in_a_pulse_train, PATIENCE + 0.5),
    (signal.SIGSTOP, in_a_bias_ramp, PATIENCE + 0.5),
]


@pytest.mark.parametrize(("number", "moment", "bar"), TRIALS[1:3])
def test_the_watchdog_takes_over(
    write_plan: Write,
    tmp_path: Path,
    number: signal.Signals,
    moment: Callable[[dict[str, Any]], bool],
    bar: float,
) -> None:
    try_once(write_plan(), tmp_path / "run", number, moment, bar)


@pytest.mark.soak
@pytest.mark.parametrize("trial", range(20))
@pytest.mark.parametrize(("number", "moment", "bar"), TRIALS)
def test_the_watchdog_takes_over_every_time(
    write_plan: Write,
    tmp_path: Path,
    trial: int,
    number: signal.Signals,
    moment: Callable[[dict[str, Any]], bool],
    bar: float,
) -> None:
    try_once(write_plan(), tmp_path / "run", number, moment, bar)
