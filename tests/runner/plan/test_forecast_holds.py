"""The forecast against what a run then takes on the mock bench: times and bytes within 25 %, as the bar asks."""

import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from runner.plan import forecast, load_plan
from runner.record import consolidate, open_run
from runner.shipped import shipped_plans

# In a process of its own, as a user runs it: the simulated bench and whatever else it starts belong to that process.
CARRY_OUT = """
import sys
from pathlib import Path
from runner.plan import load_plan
from runner.sweep import carry_out
plan, folder = map(Path, sys.argv[1:])
assert carry_out(load_plan(plan), folder).status == "finished"
"""
TOLERANCE = 0.25  # the bar on the forecast

# A plan of several legs in little wall time: few points, a large and a small step of the chamber.
TWO_LEGS = {
    "at: [23 degC]": "at: [5 degC, 9 degC]",
    "[20 degC, 30 degC]": "[0 degC, 30 degC]",
    "duration: 1 h": "duration: 4 h",
    "give_up: 30 min": "give_up: 2 h",
}


@pytest.mark.parametrize("edits", [{}, TWO_LEGS], ids=["ten minute check", "two legs"])
def test_a_run_takes_what_was_forecast(
    tmp_path: Path, edits: dict[str, str], take: Callable[..., Path]
) -> None:
    plan = take(edits)
    loaded = load_plan(plan)
    found = forecast(loaded.plan, loaded.bench)
    folder = tmp_path / "run"
    subprocess.run([sys.executable, "-c", CARRY_OUT, str(plan), str(folder)], check=True, timeout=120)
    consolidate(folder)
    run = open_run(folder)
    assert run.end - run.start == pytest.approx(found.times.total, rel=TOLERANCE)
    written = sum((folder / name).stat().st_size for name in ("journal.sqlite", "record.h5"))
    assert written == pytest.approx(found.disk_bytes, rel=TOLERANCE)


@pytest.fixture
def take(tmp_path: Path) -> Callable[..., Path]:
    """The shipped ten-minute check with some text replaced."""

    def write(edits: dict[str, str]) -> Path:
        text = (shipped_plans() / "ten_minute_check.yaml").read_text(encoding="utf-8")
        for old, new in edits.items():
            assert text.count(old) == 1, old
            text = text.replace(old, new)
        path = tmp_path / "plan.yaml"
        path.write_text(text, encoding="utf-8")
        return path

    return write
