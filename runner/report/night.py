"""The temperature history of the run: air, parts and set-point, with the legs, the events and the doubtful
points.

The history is drawn over time since the start, because a night crosses midnight and what people ask is "how
long did it take". Events are numbered in the picture and told in words, under the same numbers, in a table
below it.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime

import numpy as np
from matplotlib.axes import Axes

from runner.arrays import FloatArray
from runner.record import LegTimes, Run
from runner.report.digits import celsius
from runner.report.look import DROP_COLOURS, DROP_MARKERS, FAINT, INK, label_ends, new_figure
from runner.report.picture import Picture, Sheet

HOUR = 3600.0
MOST_SAMPLES = 1200  # of a line
MOST_NUMBERS = 40  # of events told in the table; a worse night is read in the record
# Information that a reader of the morning wants to see; the rest of it is the ordinary course of the run. Flags have a
# lane and a table of their own.
NOTABLE = frozenset({"fault", "limit", "part_end", "request", "resumed", "retry", "skip", "stop", "watchdog"})
_LANES = ("error", "warning", "info", "flagged")
_LANE_TITLES = {"error": "errors", "warning": "warnings", "info": "notes", "flagged": "flagged points"}
_LANE_LOOK = {
    "error": ("X", "#B2182B"),
    "warning": ("^", "#D55E00"),
    "info": ("o", "#0072B2"),
    "flagged": ("|", INK),
}


@dataclass(frozen=True, slots=True)
class Mark:
    """One event, or several alike in a row: when the first happened [s since the start], and in which leg."""

    number: int
    time: float
    leg: str
    level: str
    kind: str
    text: str
    point: int
    count: int


@dataclass(frozen=True, slots=True)
class Line:
    """One temperature over time: ``time`` [n] s since the start; ``marker`` empty for a line, else dots."""

    name: str
    time: FloatArray
    temperature_degC: FloatArray
    colour: str
    marker: str
    order: int


def marks(run: Run) -> tuple[Mark, ...]:
    """Events worth telling, numbered in time; like ones of one leg that follow each other count as one."""
    told: list[Mark] = []
    for event in sorted(run.events, key=lambda e: e.t):
        level = event.level if event.level in ("warning", "error") else "info"
        if event.kind == "flag" or (level == "info" and event.kind not in NOTABLE):
            continue
        leg = _leg_at(run, event.t)
        last = told[-1] if told else None
        if last is not None and (last.kind, last.level, last.leg) == (event.kind, level, leg):
            told[-1] = replace(last, count=last.count + 1)
            continue
        told.append(Mark(len(told) + 1, event.t, leg, level, event.kind, event.text, event.point, 1))
    return tuple(told)


def draw_night(run: Run, told: Sequence[Mark]) -> Picture | None:
    """Temperatures over the time since the start; None when neither the air nor a part was followed in
    time.
    """
    lines = _lines(run)
    legs = [leg for leg in run.legs if math.isfinite(leg.start)]
    if not lines:
        return None
    points = run.all_points
    flagged = points["start_time"][points["quality"] != 0]
    lanes = [
        lane for lane in _LANES if (flagged.size if lane == "flagged" else any(m.level == lane for m in told))
    ]
    margins = {"top": 0.90, "right": 0.89, "left": 0.125}
    if lanes:
        figure, (axes, strip) = new_figure(
            3.4 + 0.22 * len(lanes),
            rows=2,
            row_heights=(12, 0.9 * len(lanes)),
            layout={**margins, "hspace": 0.05},
        )
        _draw_strip(strip, told, lanes, flagged)
    else:
        figure, (axes,) = new_figure(3.4, layout=margins)
        strip = axes
    end = max([run.end - run.start, *(float(line.time[-1]) for line in lines)])
    _draw_legs(axes, legs, end)
    for line in lines:
        axes.plot(line.time / HOUR, line.temperature_degC, color=line.colour, linewidth=1.2, zorder=line.order,
                  marker=line.marker, markersize=2.8, markeredgewidth=0, linestyle="" if line.marker else "-")  # fmt: skip
    axes.set_xlim(0, max(end / HOUR, 1e-6))
    axes.set_ylim(*axes.get_ylim())
    axes.set_ylabel("Temperature (°C)")
    started = datetime.fromtimestamp(run.start, UTC).strftime("%Y-%m-%d %H:%M UTC")
    strip.set_xlabel(f"Time since {started} (h)")
    label_ends(
        axes,
        [(float(line.time[-1] / HOUR), float(line.temperature_degC[-1])) for line in lines],
        [line.name for line in lines],
        [line.colour for line in lines],
    )
    return Picture(
        name="night", caption=_caption(lines, legs, lanes), figure=figure, sheet=_sheet(lines, run.legs)
    )


def _lines(run: Run) -> list[Line]:
    """What was followed in time: the air, then each part by its log, or by its points where there is no
    log.
    """
    lines = []
    time, air = _thinned(*run.chamber_log)
    if time.size:
        lines.append(Line("air", time, air, DROP_COLOURS[0], "", 2))
    points = run.all_points
    for number, part in enumerate(run.parts):
        name = "part" if len(run.parts) == 1 else part.name
        colour = DROP_COLOURS[1 + number % (len(DROP_COLOURS) - 1)]
        time, body = _thinned(*run.body_logs[number])
        if time.size:
            lines.append(Line(name, time, body, colour, "", 3))
            continue
        mine = (points["part"] == number) & np.isfinite(points["body_temperature"])
        # Captures taken by hand have temperatures, but nobody wrote down when they were: no line over time.
        if mine.any() and run.kind != "captures":
            time, body = points["start_time"][mine], points["body_temperature"][mine]
            lines.append(Line(name, time, body, colour, DROP_MARKERS[number % len(DROP_MARKERS)], 3))
    return lines


def _thinned(time: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
    known = np.isfinite(time) & np.isfinite(values)
    time, values = time[known], values[known]
    if time.size <= MOST_SAMPLES:
        return time, values
    kept = np.unique(np.linspace(0, time.size - 1, MOST_SAMPLES).astype(np.int64))
    return time[kept], values[kept]


def _leg_at(run: Run, time: float) -> str:
    for leg in run.legs:
        if leg.start <= time and not leg.end < time:
            return celsius(leg.setpoint, 0)
    return ""


def _draw_legs(axes: Axes, legs: Sequence[LegTimes], end: float) -> None:
    spans = [
        (leg.start / HOUR, (leg.end if math.isfinite(leg.end) else end) / HOUR, leg.setpoint) for leg in legs
    ]
    width = max((last for _, last, _ in spans), default=1.0)
    for number, (first, last, setpoint) in enumerate(spans):
        axes.axvspan(first, last, color="#f2f2f2" if number % 2 == 0 else "white", zorder=0, linewidth=0)
        axes.plot([first, last], [setpoint] * 2, color=FAINT, linewidth=1.0, linestyle=(0, (4, 2)), zorder=1)
        if last - first > 0.045 * width:  # a name over a sliver would run into its neighbour's
            axes.text((first + last) / 2, 1.02, celsius(setpoint, 0), transform=axes.get_xaxis_transform(),
                      ha="center", va="bottom", fontsize=7.5, color=INK)  # fmt: skip


def _draw_strip(strip: Axes, told: Sequence[Mark], lanes: Sequence[str], flagged: FloatArray) -> None:
    strip.grid(False)
    strip.spines["left"].set_visible(False)
    strip.set_ylim(len(lanes) - 0.5, -0.5)
    strip.set_yticks(range(len(lanes)), [_LANE_TITLES[lane] for lane in lanes], fontsize=7.5)
    strip.tick_params(axis="y", length=0)
    for row, lane in enumerate(lanes):
        marker, colour = _LANE_LOOK[lane]
        if lane == "flagged":
            strip.plot(
                flagged / HOUR,
                np.full(flagged.shape, row),
                marker,
                color=colour,
                markersize=5,
                markeredgewidth=0.6,
            )
            continue
        mine = [mark for mark in told if mark.level == lane]
        strip.plot([m.time / HOUR for m in mine], [row] * len(mine), marker, color=colour, markersize=4.5,
                   linestyle="", clip_on=False)  # fmt: skip
        written = -math.inf
        for mark in mine:
            if mark.time - written < 0.012 * strip.get_xlim()[1] * HOUR or mark.number > MOST_NUMBERS:
                continue  # a number over a number is no number; the table has them all in order
            strip.annotate(str(mark.number), (mark.time / HOUR, row), xytext=(3.5, 0.5), fontsize=6.5,
                           textcoords="offset points", va="center", color=colour, annotation_clip=False)  # fmt: skip
            written = mark.time


def _caption(lines: Sequence[Line], legs: Sequence[LegTimes], lanes: Sequence[str]) -> str:
    has_dots = any(line.marker for line in lines)
    text = "Temperature history: air of the chamber and body of the part"
    text += ", the latter as dots at each point." if has_dots else "."
    if legs:
        text += " Dashed: set-point. Shaded and white: the legs, named by their set-point."
    if any(lane != "flagged" for lane in lanes):
        text += " Numbers: events, told in the table below."
    return text


def _sheet(lines: Sequence[Line], legs: Sequence[LegTimes]) -> Sheet:
    rows: list[tuple[float | str, ...]] = [
        (line.name, float(time), float(value))
        for line in lines
        for time, value in zip(line.time, line.temperature_degC, strict=True)
    ]
    rows += [
        ("set-point", float(time), float(leg.setpoint))
        for leg in legs
        for time in (leg.start, leg.end)
        if math.isfinite(time)
    ]
    return Sheet(("what", "time_since_start_s", "temperature_degC"), rows)
