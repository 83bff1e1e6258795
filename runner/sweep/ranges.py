"""How the digitizer is set for a pulse: interval from its width, ranges from the rail and the current expected."""

from collections.abc import Sequence
from dataclasses import dataclass

_TAIL = 0.25  # of the width is kept after the pulse, to see the current fall
_VOLTAGE_HEADROOM = 1.1
_CURRENT_HEADROOM = 1.15


@dataclass(frozen=True, slots=True)
class DigitizerChoice:
    """Settings for one width [s, V, V at the shunt]; ranges are +- full scale."""

    interval: float
    voltage_range: float
    shunt_range: float


def choose_interval(
    width: float, *, intervals: Sequence[float], samples: int, pretrigger_samples: int
) -> float:
    """Shortest interval that shows the whole pulse and some of what follows; the longest there is if none does.

    Args:
        width: of the pulse [s].
        intervals: that the digitizer offers [s].
        samples: of a capture.
        pretrigger_samples: of them, before the trigger.
    """
    needed = (1 + _TAIL) * width / (samples - pretrigger_samples)
    return next((one for one in sorted(intervals) if one >= needed), max(intervals))


def choose_range(largest: float, ranges: Sequence[float], *, headroom: float = _CURRENT_HEADROOM) -> float:
    """Smallest range that holds `largest` with headroom; the largest there is if none does."""
    return next((one for one in sorted(ranges) if one >= headroom * largest), max(ranges))


def choose(
    width: float,
    *,
    rail: float,
    current: float,
    shunt: float,
    samples: int,
    pretrigger_samples: int,
    intervals: Sequence[float],
    voltage_ranges: Sequence[float],
    shunt_ranges: Sequence[float],
) -> DigitizerChoice:
    """Interval and ranges for a pulse of `width` [s] that is expected to reach `current` [A] from `rail` [V]."""
    return DigitizerChoice(
        choose_interval(width, intervals=intervals, samples=samples, pretrigger_samples=pretrigger_samples),
        choose_range(rail, voltage_ranges, headroom=_VOLTAGE_HEADROOM),
        choose_range(current * shunt, shunt_ranges),
    )


def next_larger(value: float, ranges: Sequence[float]) -> float | None:
    """The range above `value`, None at the top."""
    return next((one for one in sorted(ranges) if one > value), None)
