"""Progress on the screen: a bar on a terminal, a line now and then in a log.

Times are bench time: on a simulated bench an hour passes in seconds, so the estimate is in the night's own hours.
"""

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from math import isfinite
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from runner.sweep import Progress

# In a log, one line a leg and phase, and not more often than this [s of wall time].
QUIETEST = 2.0


@contextmanager
def watching() -> Iterator[Callable[["Progress"], None]]:
    """A callback for a run's progress, drawn to suit standard output."""
    if sys.stdout.isatty():
        with _bar() as watch:
            yield watch
    else:
        yield _log_lines()


def span(seconds: float) -> str:
    """A length of time as people say it: ``45 s``, ``12 min``, ``8 h 05 min``."""
    if seconds < 90:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 90 else f"{minutes // 60} h {minutes % 60:02d} min"


def describe(progress: "Progress") -> str:
    """Where a run stands, in one line."""
    body = f", part at {progress.body_degC:.1f} °C" if isfinite(progress.body_degC) else ""
    part = f" {progress.part}" if progress.part else ""
    return (
        f"leg {progress.leg} of {progress.legs} ({progress.setpoint_degC:g} °C{body}): {progress.phase}{part}; "
        f"{progress.done} of {progress.total} points, about {span(progress.remaining)} of bench time left"
    )


@contextmanager
def _bar() -> Iterator[Callable[["Progress"], None]]:
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn
    from rich.progress import Progress as Bar

    with Bar(
        TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TextColumn("{task.fields[left]}")
    ) as bar:
        task = bar.add_task("starting", total=None, left="")

        def watch(progress: "Progress") -> None:
            bar.update(
                task,
                total=progress.total,
                completed=progress.done,
                description=f"leg {progress.leg}/{progress.legs}  {progress.setpoint_degC:g} °C  {progress.phase}",
                left=f"{span(progress.remaining)} of bench time left",
            )

        yield watch


def _log_lines() -> Callable[["Progress"], None]:
    last_said = -QUIETEST
    last_place: tuple[int, str, str] | None = None

    def watch(progress: "Progress") -> None:
        nonlocal last_said, last_place
        place = (progress.leg, progress.phase, progress.part)
        now = time.monotonic()
        if place != last_place and now - last_said >= QUIETEST:
            last_said, last_place = now, place
            print(describe(progress), flush=True)

    return watch
