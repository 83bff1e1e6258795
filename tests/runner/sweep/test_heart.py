"""The runner's side of the watchdog, against a real watchdog process that has no instruments to look after."""

import json
import os
import signal
import time
from dataclasses import asdict
from pathlib import Path

import pytest

from runner.sweep import heart as heart_module
from runner.sweep.heart import PATIENCE_VARIABLE, WatchedHeart, patience
from runner.sweep.safe_state import SafeRule

RULE = SafeRule(bleed=0.0, highest_rail=0.0, ramp=1.0, chamber_degC=25.0)


def orders(folder: Path) -> str:
    return json.dumps(
        {
            "reaches": [],
            "control": None,
            "start": 0.0,
            "not_before": 0.0,
            "rule": asdict(RULE),
            "folder": str(folder),
            "patience": 60.0,
        }
    )


def test_a_watchdog_that_is_sent_home_goes_quietly(tmp_path: Path) -> None:
    complaints: list[str] = []
    heart = WatchedHeart(orders(tmp_path), complaints.append)
    for _ in range(3):
        heart.beat()
    process = heart._process
    heart.stop()
    assert process.returncode == 0
    assert complaints == []


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGSTOP])
def test_a_watchdog_that_dies_or_hangs_is_replaced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, number: signal.Signals
) -> None:
    monkeypatch.setattr(heart_module, "_EVERY", 0.0)
    monkeypatch.setattr(heart_module, "BEAT", b"." * 4096)  # a hanging one is noticed when its pipe is full
    complaints: list[str] = []
    heart = WatchedHeart(orders(tmp_path), complaints.append)
    first = heart._process
    os.kill(first.pid, number)
    end = time.monotonic() + 20.0
    while not complaints and time.monotonic() < end:
        heart.beat()
    assert complaints == ["the watchdog had died or hung; a new one was started"]
    assert first.returncode == -signal.SIGKILL
    second = heart._process
    assert second.pid != first.pid
    heart.beat()
    heart.stop()
    assert second.returncode == 0


@pytest.mark.parametrize(("timeout", "expected"), [(0.5, 10.0), (2.0, 10.0), (5.0, 15.0), (60.0, 180.0)])
def test_patience_outlasts_a_lost_instrument(
    timeout: float, expected: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv(PATIENCE_VARIABLE, raising=False)
    assert patience(timeout) == expected
