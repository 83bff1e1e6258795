"""The temperature history of the run: air, parts and set-point, with the legs, the events and the doubtful points.

The history is drawn over time since the start, because a night crosses midnight and what people ask is "how long did
it take". Events are numbered in the picture and told in words, under the same numbers, in a table below it.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
from matplotlib.axes import Axes

from runner.arrays import FloatArray
from runner.record import Run
from runner.report.digits import celsius
from runner.report.look import DROP_COLOURS, DROP_MARKERS, FAINT, INK, new_figure
from runner.report.picture import Picture, Sheet

MOST_SAMPLES = 1200
MOST_NUMBERS = 40  # of events told in the table; a worse night is read in the record
# Information that a reader of the morning wants to see; the rest of it is the ordinary course of the run.
NOTABLE = ("stop", "resume", "retry", "reconnect", "restart", "skip", "give", "session", "watchdog", "limit")
_LANES = ("error", "warning", "info", "flagged")
_LANE_TITLES = {"error": "errors", "warning": "warnings", "info": "notes", "flagged": "flagged points"}
_LANE_LOOK = {"error": ("X", "#B2182B"), "warning": ("^", "#D55E00"), "info": ("o", "#0072B2"), "flagged": ("|", INK)}


@dataclass(frozen=True, slots=True)
class Mark:
    """One event, or several alike in a row: when the first happened [UTC s], and in which leg."""

    number: int
    time: float
    leg: str
    level: str
    kind: str
    text: str
    point: int
    count: int


def marks(run: Run) -> tuple[Mark, ...]:
    """Events worth telling, numbered in time; like ones of one leg that follow each other count as one."""
    told: list[Mark] = []
    for event in sorted(run.events, key=lambda e: e.t):
        level = event.level if event.level in ("warning", "error") else "info"
        if level == "info" and not any(word in event.kind.lower() for word in NOTABLE):
            continue
        leg = _leg_at(run, event.t)
        last = told[-1] if told else None
        if last is not None and (last.kind, last.level, last.leg) == (event.kind, level, leg):
            told[-1] = Mark(last.number, last.time, leg, level, last.kind, last.text, last.point, last.count + 1)
            continue
        told.append(Mark(len(told) + 1, event.t, leg, level, event.kind, event.text, event.point, 1))
    return tuple(told)


def draw_night(run: Run, told: Sequence[Mark]) -> Picture | None:
    """Temperatures over the time since the start; None when neither the air nor a part was recorded."""
    air_time, air = _air(run)
    points = run.all_points
    body = np.asarray(points["body_temperature"], dtype=np.float64)
    body_time = np.asarray(points["start_time"], dtype=np.float64)
    legs = [leg for leg in run.legs if math.isfinite(leg.start)]
    if air.size == 0 and not (legs and np.isfinite(body).any()):
        return None
    end = _end(run, air_time, body_time)
    flagged = body_time[np.asarray(points["quality"]) != 0]
    lanes = [lane for lane in _LANES if (flagged.size if lane == "flagged" else any(m.level == lane for m in told))]
    axes, figure = None, None
    if lanes:
        figure, (axes, strip) = new_figure(3.4 + 0.22 * len(lanes), rows=2, row_heights=(12, 0.9 * len(lanes)),
                                           hspace=0.05, top=0.90, right=0.90, left=0.125)  # fmt: skip
        _draw_strip(strip, told, lanes, (flagged - run.start) / 3600, run.start)
    else:
        figure, (axes,) = new_figure(3.4, top=0.90, right=0.90, left=0.125)
        strip = axes
    _draw_legs(axes, legs, run.start, end)
    hours = (air_time - run.start) / 3600
    ends: list[tuple[float, float]] = []
    texts: list[str] = []
    colours: list[str] = []
    if air.size:
        axes.plot(hours, air, color=DROP_COLOURS[0], linewidth=1.2)
        ends.append((float(hours[-1]), float(air[-1])))
        texts.append("air")
        colours.append(DROP_COLOURS[0])
    for part in range(len(run.parts)):
        mine = np.isfinite(body) & (np.asarray(points["part"]) == part)
        if not mine.any():
            continue
        colour, marker = DROP_COLOURS[1 + part % 5], DROP_MARKERS[part % len(DROP_MARKERS)]
        rows = np.flatnonzero(mine)
        axes.plot((body_time[rows] - run.start) / 3600, body[rows], marker, markersize=2.6, color=colour,
                  markeredgewidth=0, zorder=3)  # fmt: skip
        ends.append((float((body_time[rows[-1]] - run.start) / 3600), float(body[rows[-1]])))
        texts.append("part" if len(run.parts) == 1 else run.parts[part].name)
        colours.append(colour)
    axes.set_xlim(0, max((end - run.start) / 3600, 1e-6))
    axes.set_ylabel("Temperature (°C)")
    started = datetime.fromtimestamp(run.start, UTC).strftime("%Y-%m-%d %H:%M UTC")
    strip.set_xlabel(f"Time since {started} (h)")
    label_names(axes, ends, texts, colours)
    return Picture(
        name="night",
        caption=_caption(run, lanes),
        figure=figure,
        sheet=_sheet(run, air_time, air, body_time, body),
    )


def label_names(
    axes: Axes, ends: Sequence[tuple[float, float]], texts: Sequence[str], colours: Sequence[str]
) -> None:
    """Labels at the right-hand ends of the lines."""
    from runner.report.look import label_ends

    axes.set_ylim(*axes.get_ylim())
    label_ends(axes, ends, texts, colours)


def _air(run: Run) -> tuple[FloatArray, FloatArray]:
    time, air = (np.asarray(column, dtype=np.float64) for column in run.chamber_log)
    if time.size > MOST_SAMPLES:
        kept = np.unique(np.linspace(0, time.size - 1, MOST_SAMPLES).astype(np.int64))
        return time[kept], air[kept]
    return time, air


def _end(run: Run, *times: FloatArray) -> float:
    ends = [float(np.nanmax(time)) for time in times if time.size and np.isfinite(time).any()]
    if run.end is not None and math.isfinite(run.end):
        ends.append(run.end)
    return max(ends, default=run.start)


def _leg_at(run: Run, time: float) -> str:
    for leg in run.legs:
        if leg.start <= time and not leg.end < time:
            return celsius(leg.setpoint_degC, 0)
    return ""


def _draw_legs(axes: Axes, legs: Sequence[object], start: float, end: float) -> None:
    spans = []
    for k, leg in enumerate(legs):
        first = (leg.start - start) / 3600
        last = ((leg.end if math.isfinite(leg.end) else end) - start) / 3600
        axes.axvspan(first, last, color="#f2f2f2" if k % 2 == 0 else "white", zorder=0, linewidth=0)
        axes.plot([first, last], [leg.setpoint_degC] * 2, color=FAINT, linewidth=1.0, linestyle=(0, (4, 2)), zorder=1)
        spans.append((first, last, leg.setpoint_degC))
    width = max((last for _, last, _ in spans), default=1.0)
    for first, last, setpoint in spans:
        if last - first > 0.035 * width:  # a name over a sliver would run into its neighbour's
            axes.text((first + last) / 2, 1.02, celsius(setpoint, 0), transform=axes.get_xaxis_transform(),
                      ha="center", va="bottom", fontsize=7.5, color=INK)  # fmt: skip


def _draw_strip(strip: Axes, told: Sequence[Mark], lanes: Sequence[str], flagged: FloatArray, start: float) -> None:
    strip.grid(False)
    strip.spines["left"].set_visible(False)
    strip.set_ylim(len(lanes) - 0.5, -0.5)
    strip.set_yticks(range(len(lanes)), [_LANE_TITLES[lane] for lane in lanes], fontsize=7.5)
    strip.tick_params(axis="y", length=0)
    for row, lane in enumerate(lanes):
        marker, colour = _LANE_LOOK[lane]
        if lane == "flagged":
            strip.plot(flagged, np.full(flagged.shape, row), marker, color=colour, markersize=5, markeredgewidth=0.6)
            continue
        mine = [mark for mark in told if mark.level == lane]
        strip.plot([(m.time - start) / 3600 for m in mine], [row] * len(mine), marker, color=colour, markersize=4.5,
                   linestyle="", clip_on=False)  # fmt: skip
        for mark in mine[:MOST_NUMBERS]:
            strip.annotate(str(mark.number), ((mark.time - start) / 3600, row), xytext=(3.5, 0.5), fontsize=6.5,
                           textcoords="offset points", va="center", color=colour, annotation_clip=False)  # fmt: skip


def _caption(run: Run, lanes: Sequence[str]) -> str:
    text = "Temperature history: line, air of the chamber; dots, body of the part at each point; dashed, set-point. "
    text += "Shaded and white: the legs, named by their set-point."
    if any(lane != "flagged" for lane in lanes):
        text += " Numbers: events, told in the table below."
    return text


def _sheet(run: Run, air_time: FloatArray, air: FloatArray, body_time: FloatArray, body: FloatArray) -> Sheet:
    rows: list[tuple[float | str, ...]] = [
        ("air", float(t - run.start), float(value)) for t, value in zip(air_time, air, strict=True)
    ]
    for part, t, value in zip(run.all_points["part"], body_time, body, strict=True):
        if np.isfinite(value):
            rows.append((f"body of {run.parts[int(part)].name}", float(t - run.start), float(value)))
    for leg in run.legs:
        rows += [
            ("set-point", float(t - run.start), float(leg.setpoint_degC)) for t in (leg.start, leg.end) if math.isfinite(t)
        ]
    return Sheet(("what", "time_since_start_s", "temperature_degC"), rows)
