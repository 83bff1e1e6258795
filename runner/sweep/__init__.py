"""A plan carried out on a bench: the loop, its decisions, the safe state on every way out, and the watchdog beside it.

Takes a loaded plan and a folder, gives an `Outcome`. The only room that talks to instruments (through `drivers`). It
never knows HDF5 or what extraction makes of a point.
"""

from runner.sweep.carry_out import Outcome, carry_out
from runner.sweep.clock import BenchClock, Clock, WallClock
from runner.sweep.notify import Notifier
from runner.sweep.probe import Probed, probe
from runner.sweep.progress import Progress, Watch
from runner.sweep.resume import loaded_from_run

__all__ = [
    "BenchClock",
    "Clock",
    "Notifier",
    "Outcome",
    "Probed",
    "Progress",
    "WallClock",
    "Watch",
    "carry_out",
    "loaded_from_run",
    "probe",
]
