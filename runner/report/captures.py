"""The raw captures of chosen points: what the digitizer saw, before anybody made numbers of it.

Of each part three points are shown at up to three temperatures: the shortest pulse, the one whose peak comes
nearest to the saturation current, and the longest; at the coldest, the hottest and the temperature nearest to
25 °C. Only the first repeat is drawn, thinned so that spikes survive: of each bucket of samples the extremes
of both channels stay.
"""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from runner.arrays import FloatArray, IntArray
from runner.record import METHODS, Run
from runner.report.digits import scale_for, short
from runner.report.facts import PartFacts
from runner.report.look import LINE_STYLES, new_figure, temperature_colours, temperature_names
from runner.report.picture import Picture, Sheet

ROOM_DEGC = 25.0
BUCKETS = 90  # four samples a bucket are drawn at most


@dataclass(frozen=True, slots=True)
class Trace:
    """One drawn capture: ``place`` is 0 shortest, 1 near the knee, 2 longest; arrays are [n], SI."""

    place: int
    point: int
    temperature_degC: float
    width: float
    time: FloatArray
    voltage: FloatArray
    current: FloatArray


PLACES = ("shortest", "knee", "longest")


def draw_captures(run: Run, part: PartFacts, knees: Mapping[int, float]) -> Picture | None:
    """Voltage and current against time of the chosen points; None when the part has no captures.

    Args:
        run: the captures are read from here.
        part: whose captures.
        knees: saturation current by leg [A], where known; without it the middle width stands for the knee.
    """
    traces = list(_traces(run, part.index, knees))
    if not traces:
        return None
    places = sorted({trace.place for trace in traces})
    temperatures = sorted({trace.temperature_degC for trace in traces})
    colours = dict(zip(temperatures, temperature_colours(temperatures), strict=True))
    styles = {t: LINE_STYLES[k % len(LINE_STYLES)] for k, t in enumerate(temperatures)}
    names = dict(zip(temperatures, temperature_names(temperatures), strict=True))
    times = scale_for([float(t) for trace in traces for t in trace.time[[0, -1]]], "s")
    currents = scale_for([float(np.abs(trace.current).max()) for trace in traces], "A")
    layout = {"right": 0.985, "top": 0.90, "wspace": 0.06, "hspace": 0.08}
    figure, axes = new_figure(4.6, rows=2, columns=len(places), layout=layout)
    for trace in traces:
        column = places.index(trace.place)
        pen = {
            "color": colours[trace.temperature_degC],
            "linestyle": styles[trace.temperature_degC],
            "linewidth": 1.1,
        }
        axes[column].plot(times.of(trace.time), trace.voltage, label=names[trace.temperature_degC], **pen)
        axes[column + len(places)].plot(times.of(trace.time), currents.of(trace.current), **pen)
    for column, place in enumerate(places):
        widths = sorted({trace.width for trace in traces if trace.place == place})
        axes[column].set_title(_title(place, widths), fontsize=8.5, loc="left")
        axes[column + len(places)].set_xlabel(f"Time from trigger ({times.unit})")
    axes[0].set_ylabel("Voltage (V)")
    axes[len(places)].set_ylabel(f"Current ({currents.unit})")
    handles, labels = axes[0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="upper right", ncols=len(labels), frameon=False, fontsize=8,
                  bbox_to_anchor=(0.985, 1.0), borderaxespad=0.1)  # fmt: skip
    return Picture(
        name=f"{part.slug}_captures",
        caption=(
            f"Raw captures of {part.label}: voltage across the part and current by the shunt, first repeat of each "
            "point, no correction applied. Knee: the point whose peak comes nearest to the saturation current. "
            "Every capture is in record.h5."
        ),
        figure=figure,
        sheet=_sheet(traces),
    )


def thin(voltage: FloatArray, current: FloatArray, buckets: int = BUCKETS) -> IntArray:
    """Indices that keep the look of two signals sampled together.

    Args:
        voltage, current: [n].
        buckets: the samples are cut into that many runs; the extremes of both signals stay in each.

    Returns:
        Ascending indices, the first and the last sample among them; all of them if there are few.
    """
    samples = voltage.size
    if samples <= 4 * buckets:
        return np.arange(samples, dtype=np.int64)
    edges = np.linspace(0, samples, buckets + 1).astype(np.int64)
    kept = {0, samples - 1}
    for first, last in pairwise(edges.tolist()):
        for signal in (voltage[first:last], current[first:last]):
            kept.update((first + int(signal.argmin()), first + int(signal.argmax())))
    return np.array(sorted(kept), dtype=np.int64)


def _traces(run: Run, part: int, knees: Mapping[int, float]) -> Iterator[Trace]:
    points = run.points
    mine = np.flatnonzero((points["part"] == part) & (points["method"] == METHODS["pulse"]))
    if mine.size == 0:
        return
    leg_temperatures = {
        int(leg): float(np.nanmean(_temperature(points, mine[points["leg"][mine] == leg])))
        for leg in np.unique(points["leg"][mine])
    }
    for leg in _chosen_legs(leg_temperatures):
        of_leg = mine[points["leg"][mine] == leg]
        for place, row in _chosen_points(points, of_leg, knees.get(leg, math.nan)):
            point = int(points["point"][row])
            captures = run.captures(point)
            if captures is None:
                continue
            voltage, current = captures.voltage[0], captures.current[0]
            kept = thin(voltage, current)
            yield Trace(
                place, point, leg_temperatures[leg], float(points["pulse_width_setpoint"][row]),
                captures.time[kept], voltage[kept], current[kept],
            )  # fmt: skip


def _temperature(points: Mapping[str, np.ndarray], rows: IntArray) -> FloatArray:
    body = points["body_temperature"][rows]
    return np.where(np.isfinite(body), body, points["temperature_setpoint"][rows])


def _chosen_legs(temperatures: Mapping[int, float]) -> list[int]:
    by_temperature = sorted(temperatures, key=lambda leg: temperatures[leg])
    room = min(temperatures, key=lambda leg: abs(temperatures[leg] - ROOM_DEGC))
    return sorted({by_temperature[0], room, by_temperature[-1]}, key=lambda leg: temperatures[leg])


def _chosen_points(points: Mapping[str, np.ndarray], rows: IntArray, knee: float) -> list[tuple[int, int]]:
    """(place, row) of the shortest pulse, the one nearest to the knee, and the longest, without repeating
    one.
    """
    width = points["pulse_width_setpoint"][rows]
    peak = points["peak_current"][rows]
    # Captures taken by hand have no width that anybody set; the peak current orders them as well.
    order = rows[np.argsort(width if np.isfinite(width).all() else peak, kind="stable")]
    if order.size == 1:
        return [(2, int(order[0]))]
    if order.size == 2:
        return [(0, int(order[0])), (2, int(order[1]))]
    inner = order[1:-1]
    if math.isfinite(knee):
        middle = inner[
            int(np.argmin(np.abs(np.nan_to_num(points["peak_current"][inner], nan=np.inf) - knee)))
        ]
    else:
        middle = inner[inner.size // 2]
    return [(0, int(order[0])), (1, int(middle)), (2, int(order[-1]))]


def _title(place: int, widths: list[float]) -> str:
    known = [width for width in widths if math.isfinite(width)]
    if not known:
        return PLACES[place].capitalize()
    ends = (
        short(known[0], "s", 3)
        if len(known) == 1
        else f"{short(known[0], 's', 3)} to {short(known[-1], 's', 3)}"
    )
    return f"{PLACES[place].capitalize()}: {ends}"


def _sheet(traces: list[Trace]) -> Sheet:
    rows = [
        (trace.point, trace.temperature_degC, trace.width, float(t), float(v), float(i))
        for trace in traces
        for t, v, i in zip(trace.time, trace.voltage, trace.current, strict=True)
    ]
    header = ("point", "temperature_degC", "pulse_width_s", "time_s", "voltage_V", "current_A")
    return Sheet(header, rows)
