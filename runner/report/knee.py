"""Pictures of what changes with temperature: the saturation current against the rated one, and the
winding.
"""

import math
from collections.abc import Sequence

from matplotlib.axes import Axes

from runner.report.digits import Scale, percent, scale_for, short
from runner.report.facts import METHOD_TITLES, AtTemperature, Facts, Knee, MethodFacts, PartFacts
from runner.report.look import DROP_COLOURS, DROP_MARKERS, RATED, label_ends, new_figure
from runner.report.picture import Picture, Sheet
from runner.report.words import counted_from

_STYLE = {"pulse": ("-", "full"), "bias": ((0, (4, 2)), "none")}


def draw_knees(facts: Facts, part: PartFacts) -> Picture | None:
    """Isat(T) for each drop and method, against the rated current; None when there is no saturation
    current.
    """
    methods = [method for method in part.methods if method.knees]
    if len({knee.temperature_degC for method in methods for knee in method.knees}) < 2:
        return None
    drops = sorted({drop for method in methods for drop in method.drops})
    everything = [_shown(knee) for method in methods for knee in method.knees]
    currents = scale_for([*everything, part.rated_current], "A")
    figure, (axes,) = new_figure(3.7, layout={"right": 0.83})
    ends: list[tuple[float, float]] = []
    texts: list[str] = []
    colours: list[str] = []
    for method in methods:
        for drop in method.drops:
            style = drops.index(drop)
            knees = method.knees_at(drop)
            _draw_line(axes, knees, method.name, style, currents)
            ends.append((knees[-1].temperature_degC, currents.of(_shown(knees[-1]))))
            texts.append(f"{percent(drop)}, {method.name}" if len(methods) > 1 else f"{percent(drop)} drop")
            colours.append(DROP_COLOURS[style % len(DROP_COLOURS)])
    if math.isfinite(part.rated_current):
        axes.axhline(currents.of(part.rated_current), color=RATED, linewidth=0.9, linestyle=(0, (1, 2)))
        axes.annotate(f"rated {short(part.rated_current, 'A')}", (0.005, currents.of(part.rated_current)),
                      xycoords=axes.get_yaxis_transform(), xytext=(0, 3), textcoords="offset points",
                      color=RATED, fontsize=8)  # fmt: skip
    axes.set_ylim(*_limits([currents.of(x) for x in (*everything, part.rated_current) if math.isfinite(x)]))
    axes.margins(x=0.03)
    axes.set_xlabel("Temperature of the part (°C)")
    axes.set_ylabel(f"Saturation current ({currents.unit})")
    label_ends(axes, ends, texts, colours)
    return Picture(
        name=f"{part.slug}_saturation",
        caption=_caption(facts, part, methods),
        figure=figure,
        sheet=_sheet(methods),
    )


def draw_overview(facts: Facts, drop: float) -> Picture | None:
    """All parts together: saturation current over rated current at one drop; None for fewer than two such
    parts.
    """
    lines = []
    for part in facts.parts:
        method = next((m for m in part.methods if any(knee.is_reached for knee in m.knees_at(drop))), None)
        if method is not None and math.isfinite(part.rated_current):
            lines.append((part, method))
    if len(lines) < 2:
        return None
    figure, (axes,) = new_figure(3.4, layout={"right": 0.80})
    ends, rows = [], []
    for k, (part, method) in enumerate(lines):
        knees = [knee for knee in method.knees_at(drop) if knee.is_reached]
        ratios = [knee.estimate.value / part.rated_current for knee in knees]
        axes.plot([knee.temperature_degC for knee in knees], ratios, color=DROP_COLOURS[k % len(DROP_COLOURS)],
                  marker=DROP_MARKERS[k % len(DROP_MARKERS)], markersize=5)  # fmt: skip
        ends.append((knees[-1].temperature_degC, ratios[-1]))
        rows += [
            (part.label, method.name, knee.temperature_degC, drop, ratio, knee.estimate.low / part.rated_current,
             knee.estimate.high / part.rated_current)
            for knee, ratio in zip(knees, ratios, strict=True)
        ]  # fmt: skip
    axes.axhline(1.0, color=RATED, linewidth=0.9, linestyle=(0, (1, 2)))
    axes.annotate("rated current", (0.005, 1.0), xycoords=axes.get_yaxis_transform(), xytext=(0, 3),
                  textcoords="offset points", color=RATED, fontsize=8)  # fmt: skip
    axes.set_ylim(*_limits([1.0, *(float(row[4]) for row in rows)]))
    axes.set_xlabel("Temperature of the part (°C)")
    axes.set_ylabel("Saturation current / rated current (1)")
    colours = [DROP_COLOURS[k % len(DROP_COLOURS)] for k in range(len(lines))]
    label_ends(axes, ends, [part.label for part, _ in lines], colours)
    return Picture(
        name="together_saturation",
        caption=f"Saturation current at {percent(drop)} drop as a multiple of each part's rated current.",
        figure=figure,
        sheet=Sheet(
            ("part", "method", "temperature_degC", "drop_1", "saturation_over_rated_1", "low_1", "high_1"),
            rows,
        ),
    )


def draw_resistance(facts: Facts, part: PartFacts) -> Picture | None:
    """Winding resistance against temperature; None with fewer than two temperatures."""
    lines = [(m.name, m.resistance) for m in part.methods if len(m.resistance) > 1]
    if not lines:
        return None
    scale = scale_for([entry.estimate.value for _, entries in lines for entry in entries], "ohm")
    figure, (axes,) = new_figure(2.7, layout={"right": 0.90})
    ends = []
    for k, (name, entries) in enumerate(lines):
        known = [entry for entry in entries if math.isfinite(entry.estimate.value)]
        axes.errorbar(
            [entry.temperature_degC for entry in known],
            [scale.of(entry.estimate.value) for entry in known],
            yerr=_bars([entry.estimate.low for entry in known], [entry.estimate.value for entry in known],
                       [entry.estimate.high for entry in known], scale),
            color=DROP_COLOURS[k], marker="os"[k], markersize=4.5, linestyle=_STYLE[name][0], elinewidth=1.0, capsize=2,
            markerfacecolor=DROP_COLOURS[k] if name == "pulse" else "white",
        )  # fmt: skip
        if known:
            ends.append((known[-1].temperature_degC, scale.of(known[-1].estimate.value)))
    axes.set_xlabel("Temperature of the part (°C)")
    axes.set_ylabel(f"Winding resistance ({scale.unit})")
    label_ends(axes, ends, [name for name, _ in lines], list(DROP_COLOURS[: len(lines)]))
    return Picture(
        name=f"{part.slug}_resistance",
        caption=(
            f"DC resistance of the winding of {part.label}. Bars: {percent(facts.coverage)} interval, "
            "often smaller than the marks."
        ),
        figure=figure,
        sheet=Sheet(
            ("method", "temperature_degC", "resistance_ohm", "low_ohm", "high_ohm"),
            [(name, *_numbers(entry)) for name, entries in lines for entry in entries],
        ),
    )


def _limits(values: Sequence[float]) -> tuple[float, float]:
    # Close around the data, but never so close that a fall of a few per cent looks like a collapse.
    low, high = min(values), max(values)
    room = max(0.12 * (high - low), 0.1 * high)
    return max(0.0, low - room), high + room


def _draw_line(axes: Axes, knees: Sequence[Knee], method: str, style: int, currents: Scale) -> None:
    colour, marker = DROP_COLOURS[style % len(DROP_COLOURS)], DROP_MARKERS[style % len(DROP_MARKERS)]
    line, fill = _STYLE[method]
    reached = [knee for knee in knees if knee.is_reached]
    if reached:
        axes.errorbar(
            [knee.temperature_degC for knee in reached],
            [currents.of(knee.estimate.value) for knee in reached],
            yerr=_bars([knee.estimate.low for knee in reached], [knee.estimate.value for knee in reached],
                       [knee.estimate.high for knee in reached], currents),
            color=colour, marker=marker, markersize=5, linestyle=line, fillstyle="full", elinewidth=1.1, capsize=2.5,
            markerfacecolor=colour if fill == "full" else "white",
        )  # fmt: skip
    for knee in knees:
        if not knee.is_reached and math.isfinite(knee.estimate.low):
            # An arrow upwards from the largest current seen: the knee lies somewhere above.
            place = (knee.temperature_degC, currents.of(knee.estimate.low))
            axes.annotate("", (place[0], place[1]), xytext=(0, 16), textcoords="offset points",
                          arrowprops={"arrowstyle": "<-", "color": colour, "linewidth": 1.1})  # fmt: skip
            axes.plot(*place, marker="_", markersize=9, markeredgewidth=1.6, color=colour)


def _bars(low: list[float], value: list[float], high: list[float], scale: Scale) -> list[list[float]]:
    def length(a: float, b: float) -> float:
        return max(scale.of(b - a), 0.0) if math.isfinite(b - a) else 0.0

    return [
        [length(a, b) for a, b in zip(low, value, strict=True)],
        [length(a, b) for a, b in zip(value, high, strict=True)],
    ]


def _shown(knee: Knee) -> float:
    return knee.estimate.value if knee.is_reached else knee.estimate.low


def _numbers(entry: AtTemperature) -> tuple[float, float, float, float]:
    return (entry.temperature_degC, entry.estimate.value, entry.estimate.low, entry.estimate.high)


def _caption(facts: Facts, part: PartFacts, methods: Sequence[MethodFacts]) -> str:
    references = sorted({knee.reference for method in methods for knee in method.knees})
    text = (
        f"Saturation current of {part.label} against temperature. Drop {'; '.join(map(counted_from, references))}. "
        f"Bars: {percent(facts.coverage)} interval, often smaller than the marks."
    )
    if len(methods) > 1:
        text += (
            " Full marks: "
            + METHOD_TITLES["pulse"].lower()
            + "; open marks: "
            + METHOD_TITLES["bias"].lower()
            + "."
        )
    if not all(knee.is_reached for method in methods for knee in method.knees):
        text += " Arrow up: not reached, the bar is the largest current seen."
    return text


def _sheet(methods: Sequence[MethodFacts]) -> Sheet:
    header = (
        "method",
        "temperature_degC",
        "drop_1",
        "reference",
        "saturation_current_A",
        "low_A",
        "high_A",
        "status",
    )
    rows = [
        (method.name, knee.temperature_degC, knee.drop, knee.reference, knee.estimate.value, knee.estimate.low,
         knee.estimate.high, knee.status)
        for method in methods for drop in method.drops for knee in method.knees_at(drop)
    ]  # fmt: skip
    return Sheet(header, rows)
