"""Ctrl-C, Ctrl-C twice and SIGTERM, to a runner of its own on a simulated bench of its own, over real sockets."""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from runner.record import open_run

ROOT = Path(__file__).resolve().parents[2]

# Says where it is, and, when it lets go of its bench, what the bench's own ledger says.
RUNNER = """
import json
import sys
from pathlib import Path
import runner.sweep.opening as opening
from runner.plan import load_plan
from runner.sweep import BenchClock, carry_out
end = opening.end_simulation
def tell(site, launched):
    print(json.dumps(BenchClock(launched.control, start=0.0).ask({"do": "ledger"})), flush=True)
    end(site, launched)
opening.end_simulation = tell
outcome = carry_out(
    load_plan(Path(sys.argv[1])),
    Path(sys.argv[2]),
    watch=lambda progress: print("at", progress.phase, progress.done, flush=True),
)
print("ended", outcome.status, outcome.points, outcome.reason, flush=True)
"""

Write = Callable[..., Path]


@pytest.mark.parametrize(
    ("signals", "phase", "reason"),
    [
        ((signal.SIGINT,), "pulse", "stopped by Ctrl-C"),
        ((signal.SIGINT,), "soak", "stopped by Ctrl-C"),
        ((signal.SIGINT, signal.SIGINT), "pulse", "Ctrl-C"),
        ((signal.SIGTERM,), "bias", "stopped at once by SIGTERM"),
    ],
)
def test_a_signal_ends_the_run_safely(
    write_plan: Write, tmp_path: Path, signals: tuple[signal.Signals, ...], phase: str, reason: str
) -> None:
    plan, folder = write_plan(at="40 degC, 0 degC"), tmp_path / "run"
    process = subprocess.Popen(
        [sys.executable, "-c", RUNNER, str(plan), str(folder)],
        stdout=subprocess.PIPE,
        env=os.environ | {"PYTHONPATH": str(ROOT)},
        text=True,
    )
    assert process.stdout is not None
    with process, process.stdout as told:
        while not told.readline().startswith(f"at {phase}"):
            pass
        for number in signals:
            process.send_signal(number)
            time.sleep(0.02)  # two signals at once would be one
        lines = told.read().splitlines()
        assert process.wait(timeout=30) == 0
    ended = lines[-1].split(maxsplit=3)
    assert ended[:2] == ["ended", "stopped"]
    assert reason in ended[3]
    ledger = json.loads(lines[-2])
    on = ledger["on"]
    assert (on["supply"], on["pulser"], on["bias"], on["relays"]) == (False, False, False, [])
    assert on["bank_voltage"] < 1.0
    assert ledger["relay_moves_under_current"] == ledger["relay_moves_on_charged_bank"] == 0
    with open_run(folder) as run:
        assert run.state == "stopped"
        assert len(run.points["plan_index"]) == int(ended[2])
        assert not any(event.kind == "watchdog" for event in run.events)
