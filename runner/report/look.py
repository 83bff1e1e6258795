"""How every picture of the report looks: colours, sizes, axes, and labels written beside the lines they name.

Colours carry meaning in two ways only. Temperature is ordered, so it takes a perceptually uniform map from
dark blue (cold) to orange (hot), cut before its palest end so that every line is seen on white paper. Drops
are names, so they take the palette of Okabe and Ito (https://jfly.uni-koeln.de/color/, 2002), made for
colour-blind readers. Nothing rests on colour alone: a line style, a marker and a direct label say the same.

Figures are made through the object interface: no pyplot, no state shared between figures or threads.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from runner.arrays import FloatArray

WIDTH = 7.1  # inch: the text width of an A4 page with 15 mm margins
INK = "#222222"
FAINT = "#8a8a8a"
GRID = "#e2e2e2"
RATED = "#444444"

DROP_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#56B4E9", "#E69F00")
DROP_MARKERS = ("o", "s", "^", "D", "v", "P")
LINE_STYLES: tuple[Any, ...] = ("-", (0, (6, 1.5)), (0, (4, 1.2, 1, 1.2)), (0, (2, 1)))

_SETTINGS: Any = {
    "font.family": "DejaVu Sans",  # comes with matplotlib, so pages do not depend on the fonts of a machine
    "font.size": 8.5,
    "axes.labelsize": 8.5,
    "axes.edgecolor": FAINT,
    "axes.linewidth": 0.7,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "xtick.major.width": 0.7,
    "ytick.major.width": 0.7,
    "grid.color": GRID,
    "grid.linewidth": 0.6,
    "lines.linewidth": 1.5,
    "text.parse_math": False,  # a dollar sign in a part's label is a dollar sign
    "svg.fonttype": "path",
    "svg.hashsalt": "kneemap",  # else the identifiers inside an SVG differ from run to run
    "path.simplify_threshold": 0.3,
}


def settings() -> Any:
    """Context in which figures are made and saved; outside it matplotlib is left as it was found."""
    return matplotlib.rc_context(_SETTINGS)


def new_figure(
    height: float,
    *,
    rows: int = 1,
    columns: int = 1,
    row_heights: Sequence[float] | None = None,
    layout: Mapping[str, float] | None = None,
) -> tuple[Figure, list[Axes]]:
    """A figure of the page's width with plain axes.

    Args:
        height: inch.
        rows, columns: of axes, which share x in a column and y in a row.
        row_heights: their ratios, top first; equal when left out.
        layout: margins for `Figure.subplots_adjust`. They are fixed numbers because the automatic layouts
            cost
            more time than all the drawing.

    Returns:
        The figure and its axes, row by row.
    """
    figure = Figure(figsize=(WIDTH, height))
    FigureCanvasAgg(figure)
    grid = figure.subplots(
        rows, columns, squeeze=False, sharex="col", sharey="row", gridspec_kw={"height_ratios": row_heights}
    )
    margins = {"left": 0.085, "right": 0.87, "bottom": 0.42 / height, "top": 1 - 0.1 / height}
    figure.subplots_adjust(**{**margins, **(layout or {})})
    axes = [axis for row in grid for axis in row]
    for axis in axes:
        axis.spines[["top", "right"]].set_visible(False)
        axis.grid(True)
        axis.set_axisbelow(True)
    return figure, axes


def temperature_colours(temperatures_degC: Sequence[float] | FloatArray) -> list[Any]:
    """One colour a temperature, by its place between the coldest and the hottest."""
    values = np.asarray(temperatures_degC, dtype=np.float64)
    span = float(np.ptp(values)) if values.size else 0.0
    places = (values - values.min()) / span if span > 0 else np.full(values.shape, 0.4)
    colour_map = matplotlib.colormaps["plasma"]
    return [colour_map(0.02 + 0.74 * place) for place in places]


def temperature_names(temperatures_degC: Sequence[float] | FloatArray) -> list[str]:
    """Whole degrees, or tenths where whole degrees would give two lines one name."""
    from runner.report.digits import celsius

    names = [celsius(t, 0) for t in temperatures_degC]
    return names if len(set(names)) == len(names) else [celsius(t, 1) for t in temperatures_degC]


def spread(wanted: Sequence[float], gap: float) -> list[float]:
    """Move label positions apart, as little as needed.

    Args:
        wanted: where each label would like to stand.
        gap: smallest distance between two of them.

    Returns:
        Positions in the order given; their order along the axis is that of ``wanted``.
    """
    order = sorted(range(len(wanted)), key=lambda k: wanted[k])
    # Labels that would overlap form a block, whose members stand `gap` apart and, on average, where they want
    # to.
    blocks: list[list[float]] = []
    for k in order:
        blocks.append([wanted[k]])
        while len(blocks) > 1 and _first_of(blocks[-2], gap) + len(blocks[-2]) * gap > _first_of(
            blocks[-1], gap
        ):
            last = blocks.pop()
            blocks[-1] = blocks[-1] + last
    places = [_first_of(block, gap) + j * gap for block in blocks for j in range(len(block))]
    result = [0.0] * len(wanted)
    for k, place in zip(order, places, strict=True):
        result[k] = place
    return result


def _first_of(block: Sequence[float], gap: float) -> float:
    return sum(wish - j * gap for j, wish in enumerate(block)) / len(block)


def label_ends(
    axes: Axes,
    ends: Sequence[tuple[float, float]],
    texts: Sequence[str],
    colours: Sequence[Any],
    *,
    points: float = 10.5,
) -> None:
    """Write a label beside the right-hand end of each line, in the margin, with a thin leader to the end.

    Call it last: it reads the limits of the axes.

    Args:
        axes: its x and y limits are final.
        ends: data coordinates of the ends.
        texts, colours: one a line.
        points: distance of two labels in points (1/72 inch).
    """
    if not ends:
        return
    height = axes.bbox.height * 72 / axes.figure.dpi
    to_axes = axes.transLimits.transform(np.asarray(ends, dtype=np.float64))
    places = spread([float(y) for y in to_axes[:, 1]], points / height)
    for (x, y), place, text, colour in zip(to_axes, places, texts, colours, strict=True):
        axes.plot(
            [x + 0.004, max(x + 0.01, 1.008), 1.022], [y, place if x > 0.97 else y, place],
            transform=axes.transAxes, clip_on=False, linewidth=0.6, color=colour, alpha=0.7, zorder=1,
        )  # fmt: skip
        axes.text(1.028, place, text, transform=axes.transAxes, va="center", color=colour, fontsize=8)
