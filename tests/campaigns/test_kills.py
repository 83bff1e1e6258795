"""SIGKILL at random instants, resume, SIGKILL again: no acknowledged point is lost, and the end is that of a whole run.

The runner is a process of its own with its bench in memory, so that what is tried is the journal, the record and the
resume. Each trial kills one run again and again until it has been let finish; 20 trials of 10 kills make the long form.
"""

import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from runner.plan import load_plan
from runner.record import open_run
from runner.sweep.carry_out import carry_out_at
from runner.sweep.memory_site import MemorySite

ROOT = Path(__file__).resolve().parents[2]
SEED = 4711
LONGEST = 1.2  # s after its imports, in which a run is killed; a whole one takes about as long

RUNNER = """
import sys
from pathlib import Path
from runner.plan import load_plan
from runner.sweep import loaded_from_run
from runner.sweep.carry_out import carry_out_at
from runner.sweep.memory_site import MemorySite
from runner.sweep.resume import NOTHING, look_behind
plan, folder = Path(sys.argv[1]), Path(sys.argv[2])
resume = (folder / "journal.sqlite").exists() and "again" in sys.argv
loaded = loaded_from_run(folder) if resume else load_plan(plan)
print("go", flush=True)
behind = look_behind(folder) if resume else NOTHING
outcome = carry_out_at(
    MemorySite(loaded), loaded, folder, behind=behind, watch=lambda progress: print(progress.done, flush=True)
)
print(outcome.status, flush=True)
"""

Write = Callable[..., Path]


def run_until_killed(plan: Path, folder: Path, after: float | None) -> tuple[int, str]:
    """Start or resume, kill after so many seconds; gives the points acknowledged and the last line."""
    process = subprocess.Popen(
        [sys.executable, "-c", RUNNER, str(plan), str(folder), "again"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env=os.environ | {"PYTHONPATH": str(ROOT)},
        text=True,
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "go\n"
    if after is not None:
        time.sleep(after)
        process.send_signal(signal.SIGKILL)
    told, complaint = process.communicate()
    assert after is not None or process.returncode == 0, complaint
    lines = told.split("\n")[:-1]  # what comes after the last line end was not said
    acknowledged = [int(line) for line in lines if line.isdigit()]
    return (acknowledged[-1] if acknowledged else 0), (lines[-1] if lines else "")


def try_kills(plan: Path, folder: Path, draws: random.Random, kills: int) -> None:
    for _ in range(kills):
        acknowledged, _ = run_until_killed(plan, folder, draws.uniform(0.0, LONGEST))
        if not (folder / "journal.sqlite").exists():
            continue  # killed before the run existed
        if acknowledged:
            with open_run(folder) as run:
                assert len(set(run.all_points["plan_index"].tolist())) >= acknowledged
    _, last = run_until_killed(plan, folder, None)
    assert last == "finished"


def compare(folder: Path, unbroken: Path) -> None:
    with open_run(folder) as run, open_run(unbroken) as whole:
        mine, theirs = run.points, whole.points
        np.testing.assert_array_equal(mine["plan_index"], theirs["plan_index"])
        everything = run.all_points
        assert len(set(zip(everything["plan_index"], everything["attempt"], strict=True))) == len(
            everything["point"]
        )
        assert (everything["attempt"] == 1).all()
        # The same part at the same temperatures: within what noise and a soak's band leave open (5 % of the fall at 12 us).
        np.testing.assert_allclose(mine["inductance"], theirs["inductance"], rtol=0.05)
        np.testing.assert_allclose(mine["body_temperature"], theirs["body_temperature"], atol=1.5)


def whole_run(plan: Path, folder: Path) -> Path:
    loaded = load_plan(plan)
    assert carry_out_at(MemorySite(loaded), loaded, folder).status == "finished"
    return folder


def test_a_run_killed_again_and_again_ends_as_a_whole_one(write_plan: Write, tmp_path: Path) -> None:
    plan = write_plan(at="40 degC, 0 degC")
    try_kills(plan, tmp_path / "killed", random.Random(SEED), 3)
    compare(tmp_path / "killed", whole_run(plan, tmp_path / "whole"))


@pytest.mark.soak
@pytest.mark.parametrize("trial", range(20))
def test_two_hundred_kills_lose_no_point(write_plan: Write, tmp_path: Path, trial: int) -> None:
    plan = write_plan(at="40 degC, 0 degC")
    try_kills(plan, tmp_path / "killed", random.Random(SEED + 1 + trial), 10)
    compare(tmp_path / "killed", whole_run(plan, tmp_path / "whole"))
