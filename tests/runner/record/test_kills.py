"""SIGKILL at any instant: what was acknowledged is there, bit for bit; what was not is whole or absent."""

import itertools
import random
import runpy
import signal
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path
from typing import Any

import h5py
import pytest

from runner.record import Live, open_run, verify_record

WRITER = Path(__file__).with_name("writer.py")
POINTS, SAMPLES = 10, 4000


@pytest.fixture(scope="module")
def knowledge() -> dict[str, Any]:
    return runpy.run_path(str(WRITER))


def start(folder: Path, *more: str) -> "subprocess.Popen[str]":
    command = [sys.executable, str(WRITER), str(folder), f"--points={POINTS}", f"--samples={SAMPLES}", *more]
    return subprocess.Popen(command, stdout=subprocess.PIPE, text=True)


def kill_somewhere(process: "subprocess.Popen[str]", chance: random.Random) -> list[str]:
    """Let it speak a random number of lines and live a random moment longer; then it is gone. What it had said."""
    assert process.stdout is not None
    lines = list(itertools.islice(process.stdout, chance.randrange(2 * POINTS + 3)))
    try:
        process.wait(timeout=chance.choice([0.0, 0.0005, 0.002, 0.02]))
    except subprocess.TimeoutExpired:
        process.send_signal(signal.SIGKILL)
    lines += process.stdout.readlines()
    process.stdout.close()
    process.wait()
    return [line.strip() for line in lines]


def check_survivors(folder: Path, said: list[str], knowledge: dict[str, Any]) -> None:
    done = {int(line.split()[1]) for line in said if line.startswith("done")}
    if not (folder / "journal.sqlite").exists():
        assert not done
        return
    name = (folder / "journal.sqlite").absolute().as_uri() + "?mode=ro"
    with closing(sqlite3.connect(name, uri=True)) as connection:
        if not connection.execute("SELECT 1 FROM sqlite_master WHERE name='point'").fetchone():
            assert "created" not in said
            return
        found = knowledge["fingerprints"](connection)
    assert [index for index, _, _ in found] == list(range(len(found))), "out of plan order, or a point twice"
    assert done <= {index for index, _, _ in found}, "an acknowledged point is lost"
    for index, attempt, print_ in found:
        assert (attempt, print_) == (1, knowledge["expected"](index, SAMPLES)), (
            f"point {index} is not what was written"
        )
    rebuilt = [int(line.split()[1]) for line in said if line.startswith("consolidated")]
    record = folder / "record.h5"
    if record.exists():
        verify_record(record)
        with h5py.File(record) as file:
            indices = file["entry/points/plan_index"][:].tolist()
        assert indices == list(range(len(indices)))
        assert len(found) >= len(indices) >= max(rebuilt, default=0)
    else:
        assert not rebuilt


def campaign(place: Path, trials: int, seed: int, knowledge: dict[str, Any]) -> int:
    """Kill, look, resume, kill again, look; at last let it finish and compare with an unbroken run."""
    chance = random.Random(seed)
    killed = 0
    for trial in range(trials):
        folder = place / f"runs{trial}" / "run"
        said: list[str] = []
        for _ in range(2):
            process = start(folder)
            said += kill_somewhere(process, chance)
            killed += process.returncode == -signal.SIGKILL
            check_survivors(folder, said, knowledge)
        process = start(folder)
        out, _ = process.communicate(timeout=120)
        assert process.returncode == 0
        check_survivors(folder, said + out.split("\n"), knowledge)
        with open_run(folder) as run:
            assert run.points["plan_index"].tolist() == list(range(POINTS))
            assert run.state == "finished"
            assert all((run.all_points["attempt"] == 1).tolist())
    return killed


def test_kills_lose_nothing_and_the_resumed_run_is_the_unbroken_one(
    tmp_path: Path, knowledge: dict[str, Any]
) -> None:
    assert campaign(tmp_path, trials=2, seed=20261, knowledge=knowledge) >= 2


@pytest.mark.soak
def test_many_kills(tmp_path: Path, knowledge: dict[str, Any]) -> None:
    assert campaign(tmp_path, trials=110, seed=7, knowledge=knowledge) >= 150


def test_a_live_reader_sees_whole_points_while_they_are_written_and_rebuilt(
    tmp_path: Path, knowledge: dict[str, Any]
) -> None:
    process = start(tmp_path / "runs/run")
    assert process.stdout is not None
    assert process.stdout.readline().strip() == "created"
    seen: list[int] = []
    with Live(tmp_path / "runs/run") as live:
        while live.state() != "finished":
            points = live.points(len(seen), limit=3)
            seen += points["point"].tolist()
            counts = live._connection.execute("SELECT count(*) FROM capture GROUP BY point").fetchall()
            assert {count for (count,) in counts} <= {knowledge["REPEATS"]}, (
                "a point with some of its captures"
            )
        seen += live.points(len(seen))["point"].tolist()
    process.communicate(timeout=60)
    assert seen == list(range(1, POINTS + 1))
