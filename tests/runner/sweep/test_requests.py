"""Signals as requests."""

import os
import signal
import time

import pytest

from runner.sweep.clock import WallClock
from runner.sweep.requests import StopAtOnce, StopRequests, doze


def test_the_first_ctrl_c_is_a_note_and_the_second_breaks_off() -> None:
    requests = StopRequests()
    with requests.listening():
        os.kill(os.getpid(), signal.SIGINT)
        assert requests.is_asked
        assert requests.why == "stopped by Ctrl-C"
        with pytest.raises(StopAtOnce, match="at once"):
            os.kill(os.getpid(), signal.SIGINT)


def test_sigterm_breaks_off_at_once() -> None:
    requests = StopRequests()
    with requests.listening(), pytest.raises(StopAtOnce, match="SIGTERM"):
        os.kill(os.getpid(), signal.SIGTERM)


def test_nothing_is_raised_on_the_way_to_the_safe_state() -> None:
    requests = StopRequests()
    with requests.listening(), requests.shielded():
        for number in (signal.SIGINT, signal.SIGINT, signal.SIGTERM):
            os.kill(os.getpid(), number)
    assert requests.is_asked


def test_the_handlers_of_before_come_back() -> None:
    before = signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)
    with StopRequests().listening():
        assert signal.getsignal(signal.SIGINT) is not before[0]
    assert (signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)) == before


def test_a_stop_ends_a_long_sleep_early() -> None:
    requests = StopRequests()
    beats: list[float] = []

    def between() -> None:
        beats.append(time.monotonic())
        requests.why = "stopped by Ctrl-C"

    start = time.monotonic()
    doze(WallClock(between=between), 3600.0, requests)
    assert time.monotonic() - start < 5.0
    assert beats
