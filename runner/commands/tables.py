"""Tables a terminal shows: plain values in, rich tables out."""

from collections.abc import Mapping
from typing import Any, TextIO

from rich.box import SIMPLE_HEAD
from rich.console import Console
from rich.table import Table

METHOD_TITLES = {
    "pulse": "pulse method, differential inductance",
    "bias": "bias method, incremental inductance",
}


# Output that goes to a file or a pipe has no width of its own; tables there may be this wide.
_FILE_WIDTH = 140


def console_for(stream: TextIO) -> Console:
    """A console that writes to ``stream`` and colours nothing by itself."""
    return Console(file=stream, highlight=False, width=None if stream.isatty() else _FILE_WIDTH)


def plain_table(title: str) -> Table:
    """An empty table with a title on the left and a rule under its headings."""
    return Table(title=title, title_justify="left", title_style="bold", box=SIMPLE_HEAD, pad_edge=False)


def isat_table(label: str, method: str, numbers: Mapping[str, Any], *, coverage: float) -> Table:
    """Initial inductance and saturation currents of one part by one method, a row a temperature.

    Args:
        label: of the part.
        method: ``pulse`` or ``bias``.
        numbers: one entry of ``methods`` in a result.
        coverage: of the intervals shown, as a fraction.
    """
    currents = numbers["saturation_current"]
    columns = sorted({(row["drop"], row["reference"]) for row in currents})
    references = {reference for _, reference in columns}
    against = f"; drop from {references.pop()}" if len(references) == 1 else ""
    table = plain_table(f"{label}: {METHOD_TITLES.get(method, method)}")
    table.caption = f"{coverage:.0%} intervals{against}"
    table.caption_justify = "left"
    table.add_column("T / °C", justify="right")
    table.add_column("L₀ / µH", justify="right")
    for drop, reference in columns:
        table.add_column(
            f"Isat {drop:.0%} / A" if not references else f"Isat {drop:.0%} ({reference}) / A",
            justify="right",
        )
    for start in numbers["initial_inductance"]:
        temperature = start["temperature_degC"]
        cells = [
            f"{temperature:.1f}",
            _with_half_width(start["henry"], start["low"], start["high"], scale=1e6),
        ]
        for drop, reference in columns:
            row = next(
                (
                    row
                    for row in currents
                    if row["drop"] == drop
                    and row["reference"] == reference
                    and row["temperature_degC"] == temperature
                ),
                None,
            )
            cells.append(_current_cell(row))
        table.add_row(*cells)
    return table


def _current_cell(row: Mapping[str, Any] | None) -> str:
    if row is None:
        return ""
    if row["status"] != "measured":
        return f"above {row['low']:.3g}" if row["low"] is not None else "not reached"
    return _with_half_width(row["ampere"], row["low"], row["high"])


def _with_half_width(
    value: float | None, low: float | None, high: float | None, *, scale: float = 1.0
) -> str:
    if value is None:
        return "–"
    if low is None or high is None:
        return f"{value * scale:.4g}"
    half = (high - low) / 2 * scale
    decimals = _decimals(half)
    return f"{value * scale:.{decimals}f} ± {half:.{decimals}f}"


def _decimals(uncertainty: float) -> int:
    """Decimals that show two significant digits of an uncertainty (JCGM 100:2008, 7.2.6: at most two)."""
    from math import floor, isfinite, log10

    if not isfinite(uncertainty) or uncertainty <= 0:
        return 3
    return max(0, 1 - floor(log10(uncertainty)))
