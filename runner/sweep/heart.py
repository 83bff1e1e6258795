"""The runner's side of the watchdog: start it, give it signs of life, send it home.

Signs go down a pipe whose other end is the watchdog's standard input. The pipe closes by itself when the runner dies, so
a SIGKILL is noticed at once; a runner that hangs stops giving signs. They are given from the loop itself (between points,
in sleeps, between tries), never from a thread of their own, which would go on beating for a loop that hangs.
"""

import contextlib
import os
import select
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Protocol

_EVERY = 0.25  # s between two signs of life
_SHORTEST_PATIENCE = 10.0  # s without a sign, after which the runner counts as hung
_TIMEOUTS = 3.0  # times the longest timeout of an instrument: the loop may be waiting for a lost one
_LONGEST_START = 60.0  # s for it to be ready, on a machine that has other things to do
_GOODBYE = 10.0  # s to wait for a watchdog that was sent home
BEAT, HOME = b".", b"q"
PATIENCE_VARIABLE = (
    "KNEEMAP_PATIENCE"  # s, for trials; a shorter one may kill a runner that only waits for an instrument
)


class Heart(Protocol):
    """What the loop needs to know of a watchdog."""

    def beat(self) -> None:
        """Give a sign of life; costs nothing when called more often than needed."""

    def stop(self) -> None:
        """The bench is safe: send the watchdog home."""


class NoHeart:
    """For a bench that nobody needs to watch (in-memory benches of tests)."""

    def beat(self) -> None: ...

    def stop(self) -> None: ...


def patience(longest_timeout: float) -> float:
    """How long a runner may be silent before it counts as hung [s]."""
    given = os.environ.get(PATIENCE_VARIABLE, "")
    return float(given) if given else max(_SHORTEST_PATIENCE, _TIMEOUTS * longest_timeout)


class WatchedHeart:
    """A watchdog process and the pipe to it.

    Args:
        orders: one line of JSON, see `watchdog.py`.
        complain: told when the watchdog itself has died; a new one is started.
    """

    def __init__(self, orders: str, complain: Callable[[str], None]) -> None:
        self._orders = orders
        self._complain = complain
        self._last = 0.0
        self._process = self._start()

    def beat(self) -> None:
        now = time.monotonic()
        if now - self._last < _EVERY:
            return
        self._last = now
        try:
            self._write(BEAT)
        except OSError:
            # Dead, or hanging with its pipe full. One that woke up later would take this for the runner's death.
            self._process.kill()
            self._end()
            self._complain("the watchdog had died or hung; a new one was started")
            self._process = self._start()

    def stop(self) -> None:
        with contextlib.suppress(OSError):
            self._write(HOME)
        self._end()

    def _start(self) -> "subprocess.Popen[bytes]":
        root = Path(__file__).resolve().parents[2]
        path = os.pathsep.join([str(root), *filter(None, [os.environ.get("PYTHONPATH")])])
        process = subprocess.Popen(
            [sys.executable, "-m", "runner.sweep.watchdog"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            start_new_session=True,  # Ctrl-C at the terminal is for the runner
            env=os.environ | {"PYTHONPATH": path},
        )
        assert process.stdin is not None
        assert process.stdout is not None
        process.stdin.write(self._orders.encode() + b"\n")
        process.stdin.flush()
        os.set_blocking(process.stdin.fileno(), False)
        # It answers once everything it may need is imported: what is loaded then is not looked for in an emergency.
        answers, _, _ = select.select([process.stdout], [], [], _LONGEST_START)
        if not answers or process.stdout.readline().strip() != b"ready":
            self._complain("the watchdog did not start; nobody watches this run")
        return process

    def _write(self, sign: bytes) -> None:
        assert self._process.stdin is not None
        os.write(self._process.stdin.fileno(), sign)

    def _end(self) -> None:
        for pipe in (self._process.stdin, self._process.stdout):
            if pipe is not None:
                with contextlib.suppress(OSError):
                    pipe.close()
        try:
            self._process.wait(timeout=_GOODBYE)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
