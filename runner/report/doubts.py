"""Doubtful points: which, where in the plan, and why, told once for all points that share a reason.

Two sources speak. The extraction has sentences that name numbers ("above 11.8 V; raise its range"); the record
has flags that the run set while measuring, also on attempts that were of no use. A flag of the record is told
in its general words only where the extraction said nothing about that point and flag.
"""

import math
from dataclasses import dataclass

from runner.record import SENTENCES, Run, flag_names
from runner.report.digits import celsius, short
from runner.report.facts import PartFacts

MOST_NAMED = 6  # points of one reason that are named; the rest is counted

_GENERAL = {name: sentence for flag, sentence in SENTENCES.items() for name in flag_names(flag)}


@dataclass(frozen=True, slots=True)
class Doubt:
    """One reason and the points it concerns, as ready text."""

    flag: str
    text: str
    count: int
    points: str


def doubts(run: Run, part: PartFacts) -> tuple[Doubt, ...]:
    """All reasons for doubt about a part's points, those that concern most points first."""
    reasons: dict[tuple[str, str], list[int]] = {}
    told = set()
    for flag in part.flags:
        told.add((flag.point, flag.flag))
        reasons.setdefault((flag.flag, flag.text), []).append(flag.point)
    points = run.all_points
    for point, owner, quality in zip(points["point"], points["part"], points["quality"], strict=True):
        if owner != part.index:
            continue
        for name in flag_names(int(quality)):
            if (int(point), name) not in told:
                reasons.setdefault((name, _GENERAL[name]), []).append(int(point))
    places = _places(run)
    found = [
        Doubt(flag.replace("_", " "), text, len(concerned), _named(concerned, places))
        for (flag, text), concerned in reasons.items()
    ]
    return tuple(sorted(found, key=lambda doubt: (-doubt.count, doubt.flag)))


def _named(concerned: list[int], places: dict[int, str]) -> str:
    known = sorted(point for point in set(concerned) if point >= 0)
    if not known:
        return "no single point"
    named = [
        f"{point} ({places[point]})" if places.get(point) else str(point) for point in known[:MOST_NAMED]
    ]
    left = len(known) - len(named)
    return "; ".join(named) + (f"; and {left} more" if left else "")


def _places(run: Run) -> dict[int, str]:
    """Where a point stands in the plan, in words, by point number."""
    points = run.all_points
    columns = (
        points[n].tolist()
        for n in ("point", "temperature_setpoint", "pulse_width_setpoint", "bias_current_setpoint")
    )
    places = {}
    for point, temperature, width, bias in zip(*columns, strict=True):
        what = [celsius(temperature, 0)] if math.isfinite(temperature) else []
        if math.isfinite(width):
            what.append(short(width, "s", 3))
        if math.isfinite(bias):
            what.append(short(bias, "A", 3))
        places[int(point)] = ", ".join(what)
    return places
