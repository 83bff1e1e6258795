"""A process beside the runner that outlives it: when the runner dies or hangs, the bench is made safe from here.

`python -m runner.sweep.watchdog` reads its orders (one line of JSON: how to reach each instrument, the way to the safe
state, the run's folder, the patience) and then signs of life from standard input. It ends quietly when it is sent home.
When the input ends (the runner has died) or no sign comes for longer than the patience (it hangs), it kills what is left
of the runner, so that it cannot wake up and take the bench back, opens sessions of its own and walks the same way to the
safe state as the runner would. Then it says so in the run's event log and notifies. It opens each instrument only when its
turn comes: one that does not answer must not keep the outputs of the others on.
"""

import contextlib
import json
import os
import select
import signal
import sys
import time
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from runner.errors import BenchError, KneemapError
from runner.record import EventRow, append_event
from runner.sweep.clock import BenchClock, Clock, WallClock
from runner.sweep.heart import HOME
from runner.sweep.locks import bench_locked
from runner.sweep.notify import Notifier
from runner.sweep.opening import Reach
from runner.sweep.safe_state import SafeReport, SafeRule, reach_safe_state

_LOCK_WAIT = 2.0  # s for the runner's locks to be let go of after its death
_CONTROL = 0  # standard input


class LateRoles(Mapping[str, Any]):
    """Instruments by role, each opened when it is first asked for; asking raises what opening raised."""

    def __init__(self, reaches: Mapping[str, Reach]) -> None:
        self._reaches = reaches
        self._opened: dict[str, Any] = {}

    def __getitem__(self, role: str) -> Any:
        if role not in self._opened:
            self._opened[role] = self._reaches[role].open()
        return self._opened[role]

    def __contains__(self, role: object) -> bool:
        return role in self._reaches

    def __iter__(self) -> Iterator[str]:
        return iter(self._reaches)

    def __len__(self) -> int:
        return len(self._reaches)

    def close(self) -> None:
        for instrument in self._opened.values():
            instrument.close()


def main() -> int:
    """Watch until sent home, or take over."""
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)  # whoever stops the runner stops it, and it sends us home
    orders = json.loads(_line())
    runner = os.getppid()
    _warm_up(orders)
    print("ready", flush=True)
    why = _watch(float(orders["patience"]))
    if why is None:
        return 0
    if os.getppid() == runner:  # otherwise it has died already, and its number may be somebody else's by now
        with contextlib.suppress(ProcessLookupError):
            os.kill(runner, signal.SIGKILL)
    text = _take_over(orders)
    _tell(orders, f"{why}; {text}")
    return 1


def _line() -> str:
    line = b""
    while not line.endswith(b"\n"):
        piece = os.read(_CONTROL, 1)
        if not piece:
            raise SystemExit(0)  # the runner ended before it had given its orders; nothing is on yet
        line += piece
    return line.decode()


def _warm_up(orders: Mapping[str, Any]) -> None:
    """Read the dialects once, which also imports all that opening an instrument needs."""
    for given in orders["reaches"]:
        Reach.from_json(given).read_dialect()


def _watch(patience: float) -> str | None:
    """Wait for the end; None when sent home, else what has become of the runner."""
    while True:
        readable, _, _ = select.select([_CONTROL], [], [], patience)
        if not readable:
            return f"the runner gave no sign of life for {patience:g} s and was killed"
        signs = os.read(_CONTROL, 4096)
        if not signs:
            return "the runner has died"
        if HOME in signs:
            return None


def _take_over(orders: Mapping[str, Any]) -> str:
    reaches = {one["role"]: Reach.from_json(one) for one in orders["reaches"]}
    simulated = orders["control"] is not None
    resources = [] if simulated else [reach.resource for reach in reaches.values()]
    try:
        with bench_locked(resources, wait=_LOCK_WAIT):
            return str(_make_safe(orders, reaches))
    except BenchError as error:
        return f"the bench was left alone, since another run has taken it: {error}"


def _make_safe(orders: Mapping[str, Any], reaches: Mapping[str, Reach]) -> SafeReport:
    roles = LateRoles(reaches)
    try:
        return reach_safe_state(roles, SafeRule(**orders["rule"]), _clock(orders))
    finally:
        roles.close()


def _clock(orders: Mapping[str, Any]) -> Clock:
    if orders["control"] is None:
        return WallClock(not_before=orders["not_before"])
    return BenchClock(orders["control"], start=orders["start"])


def _tell(orders: Mapping[str, Any], text: str) -> None:
    """Into the run's event log, and to people; either may fail without harm to the other."""
    folder = Path(orders["folder"])
    with contextlib.suppress(KneemapError, OSError):
        now = _now(orders)
        append_event(folder, EventRow(now, "error", "watchdog", text))
    complaints: list[str] = []
    notifier = Notifier(complaints.append)
    notifier.tell("kneemap: the watchdog took over", f"{folder.name}: {text}")
    notifier.close()
    for complaint in complaints:
        with contextlib.suppress(KneemapError, OSError):
            append_event(folder, EventRow(_now(orders), "warning", "notify", complaint))


def _now(orders: Mapping[str, Any]) -> float:
    try:
        return _clock(orders).now()
    except OSError:
        return time.time()


if __name__ == "__main__":
    sys.exit(main())
