"""Pictures of one part and one method: L(I) by temperature, and the surface L(I, T)."""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator
from matplotlib.tri import Triangulation

from runner.arrays import FloatArray, IntArray
from runner.report.digits import Scale, celsius, percent, scale_for, short
from runner.report.facts import INDUCTANCE, Facts, Family, MethodFacts, PartFacts
from runner.report.look import (
    DROP_MARKERS,
    INK,
    LINE_STYLES,
    RATED,
    label_ends,
    new_figure,
    temperature_colours,
    temperature_names,
)
from runner.report.picture import Picture, Sheet

MOST_SAMPLES = 240  # of a curve on paper; more is not seen
MAP_SAMPLES = 120
# Perceptually uniform, without its darkest end: thin dark contour lines must be seen on it.
_MAP_COLOURS = ListedColormap(matplotlib.colormaps["viridis"](np.linspace(0.18, 1.0, 256)))


def draw_curves(facts: Facts, part: PartFacts, method: MethodFacts) -> Picture | None:
    """L(I), one line a temperature, with its band; None when nothing was measured."""
    family = method.family
    if family is None or not np.isfinite(family.inductance).any():
        return None
    currents, inductances = _scales(family)
    figure, (axes,) = new_figure(3.9)
    colours = temperature_colours(family.temperature_degC)
    names = temperature_names(family.temperature_degC)
    lines: list[Line2D] = []
    for row, colour in enumerate(colours):
        seen = np.flatnonzero(np.isfinite(family.inductance[row]))
        if seen.size == 0:
            continue
        kept = np.union1d(seen[:: max(1, seen.size // MOST_SAMPLES)], seen[-1:])
        current = currents.of(family.current[kept])
        inductance = inductances.of(family.inductance[row, kept])
        margin = facts.coverage_factor * inductances.of(family.errors[row, kept])
        axes.fill_between(
            current, inductance - margin, inductance + margin, color=colour, alpha=0.22, linewidth=0
        )
        lines += axes.plot(current, inductance, color=colour, linestyle=LINE_STYLES[row % len(LINE_STYLES)],
                           marker=_marker(method.name, seen.size), markersize=3, label=names[row])  # fmt: skip
    _draw_ways_down(axes, family, method, colours, currents, inductances)
    axes.set_ylim(bottom=0)
    axes.set_xlim(
        0, float(currents.of(family.current[np.isfinite(family.inductance).any(axis=0)][-1])) * 1.02
    )
    axes.set_xlabel(f"Current ({currents.unit})")
    axes.set_ylabel(f"{INDUCTANCE[method.name].capitalize()} ({inductances.unit})")
    _mark_knees(axes, family, method, colours, currents, inductances)
    _mark_rated(axes, part, currents)
    _name_lines(axes, lines)
    return Picture(
        name=f"{part.slug}_{method.name}_curves",
        caption=_curves_caption(facts, part, method),
        figure=figure,
        sheet=_curves_sheet(family),
    )


def draw_surface(part: PartFacts, method: MethodFacts) -> Picture | None:
    """L over current and temperature as a map with contour lines; None with fewer than two temperatures."""
    mesh = _mesh(method.family) if method.family else None
    if method.family is None or mesh is None:
        return None
    currents, inductances = _scales(method.family)
    net = Triangulation(currents.of(mesh.current), mesh.temperature_degC, mesh.triangles)
    inductance = inductances.of(mesh.inductance)
    figure, (axes,) = new_figure(3.5, layout={"right": 0.86, "top": 0.97})
    axes.grid(False)
    axes.set_facecolor("#f3f3f3")
    levels = MaxNLocator(30).tick_values(float(inductance.min()), float(inductance.max()))
    filled = axes.tricontourf(net, inductance, levels=levels, cmap=_MAP_COLOURS)
    filled.set_edgecolor("face")  # else the page shows hairlines between the levels
    rounder = MaxNLocator(9).tick_values(levels[0], levels[-1])
    lines = axes.tricontour(net, inductance, levels=rounder, colors=INK, linewidths=0.5, alpha=0.8)
    axes.clabel(lines, fontsize=7, fmt=lambda level: f"{level:g}")
    bar = figure.colorbar(filled, cax=figure.add_axes((0.88, 0.15, 0.022, 0.79)), ticks=MaxNLocator(8))
    bar.set_label(f"{INDUCTANCE[method.name].capitalize()} ({inductances.unit})")
    bar.outline.set_visible(False)
    rows = np.unique(mesh.temperature_degC)
    axes.plot(np.full(rows.size, net.x.min()), rows, ">", color=INK, markersize=4, clip_on=False, zorder=5)
    axes.set_xlabel(f"Current ({currents.unit})")
    axes.set_ylabel("Temperature of the part (°C)")
    axes.set_xlim(float(net.x.min()), float(net.x.max()))
    for place, drop in enumerate(method.drops):
        _trace_knee(axes, method, drop, currents, place)
    return Picture(
        name=f"{part.slug}_{method.name}_surface",
        caption=(
            f"{INDUCTANCE[method.name].capitalize()} of {part.label} over current and temperature. Triangles on the "
            "left: temperatures that were measured; the map is straight between them. Dashed: saturation current at "
            "each drop asked for. Grey: not measured."
        ),
        figure=figure,
        sheet=_curves_sheet(method.family),
    )


@dataclass(frozen=True, slots=True)
class _Mesh:
    """Nodes [n] where something was measured and the triangles [k, 3] between them."""

    current: FloatArray
    temperature_degC: FloatArray
    inductance: FloatArray
    triangles: IntArray


def _mesh(family: Family) -> _Mesh | None:
    """A net over what was measured and no more; None with fewer than two temperatures of two currents each.

    Rows of the table become rows of nodes. Between two rows the net joins equal currents, so that the map is straight in
    temperature there; where one row ends sooner, the rest of the other is joined to its end.
    """
    measured = np.isfinite(family.inductance)
    rows = [r for r in range(measured.shape[0]) if np.count_nonzero(measured[r]) > 1]
    if len(rows) < 2 or np.ptp(family.temperature_degC[rows]) <= 0:
        return None
    columns = np.flatnonzero(measured.any(axis=0))
    ends = [np.flatnonzero(measured[r])[[0, -1]] for r in rows]
    columns = np.union1d(columns[:: max(1, columns.size // MAP_SAMPLES)], np.concatenate(ends))
    at = [(r, c) for r in rows for c in columns if measured[r, c]]
    number = {place: k for k, place in enumerate(at)}
    triangles: list[tuple[int, int, int]] = []
    for lower, upper in pairwise(rows):
        below, above = (
            [(float(family.current[c]), number[r, c]) for c in columns if measured[r, c]]
            for r in (lower, upper)
        )
        triangles += _strip(below, above)
    return _Mesh(
        current=np.array([family.current[c] for _, c in at]),
        temperature_degC=np.array([family.temperature_degC[r] for r, _ in at]),
        inductance=np.array([family.inductance[place] for place in at]),
        triangles=np.array(triangles, dtype=np.int64),
    )


def _strip(below: list[tuple[float, int]], above: list[tuple[float, int]]) -> Iterator[tuple[int, int, int]]:
    """Triangles between two rows of (current, node): the row that lags behind in current goes one node on."""
    i = j = 0
    while i + 1 < len(below) or j + 1 < len(above):
        if j + 1 == len(above) or (i + 1 < len(below) and below[i + 1][0] <= above[j + 1][0]):
            yield below[i][1], below[i + 1][1], above[j][1]
            i += 1
        else:
            yield below[i][1], above[j + 1][1], above[j][1]
            j += 1


def _trace_knee(axes: Axes, method: MethodFacts, drop: float, currents: Scale, place: int) -> None:
    """The saturation current as a dashed line on the map, its drop written on it; ``place`` staggers the
    labels.
    """
    reached = [knee for knee in method.knees_at(drop) if knee.is_reached]
    if len(reached) < 2:
        return
    amperes = [currents.of(knee.estimate.value) for knee in reached]
    temperatures = [knee.temperature_degC for knee in reached]
    axes.plot(amperes, temperatures, color="black", linewidth=1.3, linestyle=(0, (4, 2)))
    at = temperatures[0] + (0.3 + 0.2 * (place % 3)) * (temperatures[-1] - temperatures[0])
    axes.annotate(f"−{percent(drop)}", (float(np.interp(at, temperatures, amperes)), at), ha="center", va="center",
                  fontsize=7.5, bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.85, "pad": 1.2})  # fmt: skip


def _name_lines(axes: Axes, lines: list[Line2D]) -> None:
    """Labels beside the ends where the lines end together, else a list in the corner that L(I) leaves empty."""
    ends = [(float(x), float(y)) for x, y in (np.asarray(line.get_xydata())[-1] for line in lines)]
    reach = [current for current, _ in ends]
    if min(reach) > 0.97 * max(reach):
        label_ends(
            axes, ends, [str(line.get_label()) for line in lines], [line.get_color() for line in lines]
        )
        return
    axes.legend(handles=lines[::-1], loc="lower left", frameon=False, fontsize=8, handlelength=3.2,
                labelspacing=0.35, borderaxespad=0.8)  # fmt: skip


def _scales(family: Family) -> tuple[Scale, Scale]:
    measured = family.current[np.isfinite(family.inductance).any(axis=0)]
    return scale_for(measured.tolist(), "A"), scale_for(family.inductance.ravel().tolist(), "H")


def _marker(method: str, samples: int) -> str:
    # A bias curve stands on the currents that were set; a pulse curve is a fit, and marks would feign readings.
    return "o" if method == "bias" and samples <= 60 else ""


def _mark_knees(
    axes: Axes, family: Family, method: MethodFacts, colours: list[Any], currents: Scale, inductances: Scale
) -> None:
    for marker, drop in zip(DROP_MARKERS, method.drops, strict=False):
        for knee in method.knees_at(drop):
            row = int(np.argmin(np.abs(family.temperature_degC - knee.temperature_degC)))
            seen = np.isfinite(family.inductance[row])
            if not knee.is_reached or not seen.any():
                continue
            height = float(np.interp(knee.estimate.value, family.current[seen], family.inductance[row, seen]))
            axes.plot(currents.of(knee.estimate.value), inductances.of(height), marker=marker, markersize=5.5,
                      markerfacecolor="white", markeredgecolor=colours[row], markeredgewidth=1.1, zorder=4)  # fmt: skip


def _ways_down(method: MethodFacts) -> list[Mapping[str, Any]]:
    """Of a bias series that came back by another way: the record of each temperature where it did."""
    return [row for row in method.extras.get("branches", ()) if row.get("branches_differ")]


def _draw_ways_down(
    axes: Axes, family: Family, method: MethodFacts, colours: list[Any], currents: Scale, inductances: Scale
) -> None:
    for way in _ways_down(method):
        row = int(np.argmin(np.abs(family.temperature_degC - way["temperature_degC"])))
        curve = way["curves"]
        axes.plot(currents.of(np.array(curve["ampere"])), inductances.of(np.array(curve["down_henry"])),
                  color=colours[row], linestyle=(0, (1, 1.5)), linewidth=1.1)  # fmt: skip


def _mark_rated(axes: Axes, part: PartFacts, currents: Scale) -> None:
    rated = currents.of(part.rated_current)
    if math.isfinite(rated) and rated < axes.get_xlim()[1]:
        axes.axvline(rated, color=RATED, linewidth=0.9, linestyle=(0, (1, 2)))
        axes.annotate(f"rated {short(part.rated_current, 'A')}", (rated, 0.02), xycoords=axes.get_xaxis_transform(),
                      xytext=(3, 0), textcoords="offset points", color=RATED, fontsize=8)  # fmt: skip


_MARKER_WORDS = dict(
    zip(DROP_MARKERS, ("circle", "square", "triangle", "diamond", "down triangle", "plus"), strict=True)
)


def _curves_caption(facts: Facts, part: PartFacts, method: MethodFacts) -> str:
    assert method.family is not None
    marks = [
        f"{_MARKER_WORDS[marker]}: {percent(drop)} drop"
        for marker, drop in zip(DROP_MARKERS, method.drops, strict=False)
        if any(knee.is_reached for knee in method.knees_at(drop))
    ]
    return (
        f"{INDUCTANCE[method.name].capitalize()} of {part.label} against current, {_range(method.family)}. "
        f"Band: {percent(facts.coverage)} interval, often narrower than the line."
        + (f" Marks on the lines: {', '.join(marks)}." if marks else "")
        + (" Dotted: on the way down, where that is another curve." if _ways_down(method) else "")
    )


def _range(family: Family) -> str:
    coldest, hottest = (
        celsius(float(t), 0) for t in (family.temperature_degC.min(), family.temperature_degC.max())
    )
    return f"at {coldest}" if coldest == hottest else f"from {coldest} to {hottest}"


def _curves_sheet(family: Family) -> Sheet:
    rows: list[tuple[float, ...]] = []
    for row, temperature in enumerate(family.temperature_degC):
        for column in np.flatnonzero(np.isfinite(family.inductance[row])):
            rows.append((
                float(temperature), float(family.current[column]), float(family.inductance[row, column]),
                float(family.errors[row, column]),
            ))  # fmt: skip
    return Sheet(("temperature_degC", "current_A", "inductance_H", "inductance_standard_uncertainty_H"), rows)
