"""Pictures of one part and one method: L(I) by temperature, and the surface L(I, T)."""

import math
from typing import Any

import numpy as np
from matplotlib.axes import Axes

from runner.report.digits import Scale, celsius, percent, scale_for, short, significant
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


def draw_curves(facts: Facts, part: PartFacts, method: MethodFacts) -> Picture | None:
    """L(I), one line a temperature, with its band; None when nothing was measured."""
    family = method.family
    if family is None or not np.isfinite(family.inductance).any():
        return None
    currents, inductances = _scales(family)
    figure, (axes,) = new_figure(3.9)
    colours = temperature_colours(family.temperature_degC)
    names = temperature_names(family.temperature_degC)
    ends, shown = [], []
    for row, colour in enumerate(colours):
        seen = np.flatnonzero(np.isfinite(family.inductance[row]))
        if seen.size == 0:
            continue
        thin = seen[:: max(1, seen.size // MOST_SAMPLES)]
        current = currents.of(family.current[thin])
        inductance = inductances.of(family.inductance[row, thin])
        margin = facts.coverage_factor * inductances.of(family.errors[row, thin])
        axes.fill_between(current, inductance - margin, inductance + margin, color=colour, alpha=0.22, linewidth=0)
        axes.plot(current, inductance, color=colour, linestyle=LINE_STYLES[row % len(LINE_STYLES)],
                  marker=_marker(seen.size), markersize=3)  # fmt: skip
        ends.append((float(current[-1]), float(inductance[-1])))
        shown.append(row)
    axes.set_ylim(bottom=0)
    axes.set_xlim(0, float(currents.of(family.current[np.isfinite(family.inductance).any(axis=0)][-1])) * 1.02)
    axes.set_xlabel(f"Current ({currents.unit})")
    axes.set_ylabel(f"{INDUCTANCE[method.name].capitalize()} ({inductances.unit})")
    _mark_knees(axes, family, method, colours, currents, inductances)
    _mark_rated(axes, part, currents)
    label_ends(axes, ends, [names[row] for row in shown], [colours[row] for row in shown])
    return Picture(
        name=f"{part.slug}_{method.name}_curves",
        caption=_curves_caption(facts, part, method),
        figure=figure,
        sheet=_curves_sheet(family),
    )


def draw_surface(part: PartFacts, method: MethodFacts) -> Picture | None:
    """L over current and temperature as a map with contour lines; None with fewer than two temperatures."""
    family = method.family
    if family is None or family.temperature_degC.size < 2 or np.ptp(family.temperature_degC) <= 0:
        return None
    columns = np.flatnonzero(np.isfinite(family.inductance).any(axis=0))
    if columns.size < 2:
        return None
    columns = columns[:: max(1, columns.size // MOST_SAMPLES)]
    currents, inductances = _scales(family)
    current = currents.of(family.current[columns])
    values = np.ma.masked_invalid(inductances.of(family.inductance[:, columns]))
    figure, (axes,) = new_figure(3.5, right=0.97)
    axes.grid(False)
    filled = axes.contourf(current, family.temperature_degC, values, levels=24, cmap="viridis")
    lines = axes.contour(current, family.temperature_degC, values, levels=8, colors="white", linewidths=0.8)
    axes.clabel(lines, fontsize=7.5, fmt=lambda level: significant(level, 3))
    bar = figure.colorbar(filled, ax=axes, pad=0.015, fraction=0.055)
    bar.set_label(f"{INDUCTANCE[method.name].capitalize()} ({inductances.unit})")
    bar.outline.set_visible(False)
    axes.plot(np.full(family.temperature_degC.shape, current[0]), family.temperature_degC, ">", color=INK,
              markersize=4, clip_on=False, zorder=5)  # fmt: skip
    for drop in method.drops:
        reached = [knee for knee in method.knees_at(drop) if knee.is_reached]
        if len(reached) > 1:
            amperes = [currents.of(knee.estimate.value) for knee in reached]
            axes.plot(amperes, [knee.temperature_degC for knee in reached], color="black", linewidth=1.2, linestyle="--")
            axes.annotate(f"−{percent(drop)}", (amperes[-1], reached[-1].temperature_degC), xytext=(0, 3),
                          textcoords="offset points", ha="center", va="bottom", fontsize=7.5, annotation_clip=False)  # fmt: skip
    axes.set_facecolor("#f3f3f3")
    axes.set_xlabel(f"Current ({currents.unit})")
    axes.set_ylabel("Temperature of the part (°C)")
    axes.set_xlim(float(current[0]), float(current[-1]))
    figure.subplots_adjust(top=0.93)
    return Picture(
        name=f"{part.slug}_{method.name}_surface",
        caption=(
            f"{INDUCTANCE[method.name].capitalize()} of {part.label} over current and temperature. Triangles on the "
            "left: temperatures that were measured; the map is straight between them. Dashed: saturation current at "
            "each drop asked for. Grey: not measured."
        ),
        figure=figure,
        sheet=_curves_sheet(family),
    )


def _scales(family: Family) -> tuple[Scale, Scale]:
    measured = family.current[np.isfinite(family.inductance).any(axis=0)]
    return scale_for(measured.tolist(), "A"), scale_for(family.inductance.ravel().tolist(), "H")


def _marker(samples: int) -> str:
    # A bias curve has a point where the source stood; a pulse curve is a fit, and marks on it would feign readings.
    return "o" if samples <= 60 else ""


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


def _mark_rated(axes: Axes, part: PartFacts, currents: Scale) -> None:
    rated = currents.of(part.rated_current)
    if math.isfinite(rated) and rated < axes.get_xlim()[1]:
        axes.axvline(rated, color=RATED, linewidth=0.9, linestyle=(0, (1, 2)))
        axes.annotate(f"rated {short(part.rated_current, 'A')}", (rated, 0.02), xycoords=axes.get_xaxis_transform(),
                      xytext=(3, 0), textcoords="offset points", color=RATED, fontsize=8)  # fmt: skip


_MARKER_WORDS = dict(zip(DROP_MARKERS, ("circle", "square", "triangle", "diamond", "down triangle", "plus"), strict=True))


def _curves_caption(facts: Facts, part: PartFacts, method: MethodFacts) -> str:
    coldest, hottest = _range(method)
    marks = [
        f"{_MARKER_WORDS[marker]}: {percent(drop)} drop"
        for marker, drop in zip(DROP_MARKERS, method.drops, strict=False)
        if any(knee.is_reached for knee in method.knees_at(drop))
    ]
    return (
        f"{INDUCTANCE[method.name].capitalize()} of {part.label} against current, {coldest} to {hottest}. "
        f"Band: {percent(facts.coverage)} interval, often narrower than the line."
        + (f" Marks on the lines: {', '.join(marks)}." if marks else "")
    )


def _range(method: MethodFacts) -> tuple[str, str]:
    assert method.family is not None
    temperatures = method.family.temperature_degC
    return celsius(float(temperatures.min()), 0), celsius(float(temperatures.max()), 0)


def _curves_sheet(family: Family) -> Sheet:
    rows: list[tuple[float, ...]] = []
    for row, temperature in enumerate(family.temperature_degC):
        for column in np.flatnonzero(np.isfinite(family.inductance[row])):
            rows.append((
                float(temperature), float(family.current[column]), float(family.inductance[row, column]),
                float(family.errors[row, column]),
            ))  # fmt: skip
    return Sheet(("temperature_degC", "current_A", "inductance_H", "inductance_standard_uncertainty_H"), rows)
