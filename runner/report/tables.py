"""Tables of the page, as rows of ready text: the template only sets them.

In a column every number has the unit of the head and as many digits as its own interval supports (see `digits`).
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from runner.report.digits import (
    NOTHING,
    celsius,
    fixed,
    interval_text,
    percent,
    round_uncertainty,
    scale_for,
    significant,
)
from runner.report.facts import AtTemperature, Facts, Knee, MethodFacts, PartFacts, number
from runner.report.words import counted_from, margin_text

NOT_REACHED = "not reached"


@dataclass(frozen=True, slots=True)
class Table:
    """Head and rows of equal length; a cell may hold lines, of which all but the first are set small."""

    title: str
    head: tuple[str, ...]
    rows: tuple[tuple[tuple[str, ...], ...], ...]
    note: str = ""


def knee_table(facts: Facts, part: PartFacts, method: MethodFacts) -> Table:
    """Isat by temperature (rows) and drop (columns), with interval and margin to the rated current in each cell."""
    scale = scale_for([x for k in method.knees for x in (k.estimate.value, k.estimate.low)], "A")
    by_place = {(knee.temperature_degC, knee.drop): knee for knee in method.knees}
    temperatures = sorted({knee.temperature_degC for knee in method.knees})

    def cell(knee: Knee | None) -> tuple[str, ...]:
        if knee is None:
            return (NOTHING,)
        margin = margin_text(knee, part.rated_current)
        lines = [margin] if margin else []
        if knee.is_reached:
            text = interval_text(knee.estimate.value, knee.estimate.low, knee.estimate.high, factor=scale.factor)
            return (text.value, f"{text.low} to {text.high}", *lines)
        # Any other status is shown under its own name: the report does not know better than the extraction.
        seen = knee.estimate.low
        bound = f"above {significant(scale.of(seen), 3)} {scale.unit}" if math.isfinite(seen) else ""
        return (NOT_REACHED if knee.status == NOT_REACHED else knee.status, *([bound] if bound else []), *lines)

    rows = tuple(
        ((fixed(temperature, 1),), *(cell(by_place.get((temperature, drop))) for drop in method.drops))
        for temperature in temperatures
    )
    references = sorted({knee.reference for knee in method.knees})
    note = f"Drop {'; '.join(counted_from(r) for r in references)}. Below each value: its {percent(facts.coverage)} interval"
    if math.isfinite(part.rated_current):
        note += ", then the margin to the rated current with the same interval"
    return Table(
        "Saturation current",
        ("Temperature (°C)", *(f"{percent(drop)} drop ({scale.unit})" for drop in method.drops)),
        rows,
        note + ".",
    )


def temperature_table(facts: Facts, title: str, entries: Sequence[AtTemperature], unit: str) -> Table:
    """A quantity by temperature with its interval."""
    scale = scale_for([entry.estimate.value for entry in entries], unit)
    rows = []
    for entry in entries:
        text = interval_text(entry.estimate.value, entry.estimate.low, entry.estimate.high, factor=scale.factor)
        interval = f"{text.low} to {text.high}" if text.low != NOTHING else NOTHING
        rows.append(((fixed(entry.temperature_degC, 1),), (text.value,), (interval,)))
    head = ("Temperature (°C)", f"{title} ({scale.unit})", f"{percent(facts.coverage)} interval ({scale.unit})")
    return Table(title, head, tuple(rows))


def budget_table(entry: Mapping[str, Any]) -> Table | None:
    """Contributions to the uncertainty of one saturation current, the largest first; None when there are none."""
    contributions = [
        (str(c.get("name", "")), number(c.get("standard_uncertainty"))) for c in entry.get("contributions") or []
    ]
    contributions = sorted((c for c in contributions if c[1] > 0), key=lambda c: -c[1])
    if not contributions:
        return None
    total = math.sqrt(sum(u**2 for _, u in contributions))
    scale = scale_for([total], "A")

    def line(name: str, u: float) -> tuple[tuple[str, ...], ...]:
        rounded, places = round_uncertainty(scale.of(u))
        return ((name,), (fixed(rounded, places),), (f"{100 * u**2 / total**2:.1f} %",))

    rows = [line(name, u) for name, u in contributions]
    rows.append(line("combined", total))
    return Table(
        f"Uncertainty of the saturation current at {percent(number(entry.get('drop')))} drop, "
        f"{celsius(number(entry.get('temperature_degC')))}",
        ("Contribution", f"Standard uncertainty ({scale.unit})", "Share of the variance"),
        tuple(rows),
    )


def flag_rows(part: PartFacts, known: Mapping[int, str]) -> tuple[tuple[str, str, str, str], ...]:
    """(point, where, flag, sentence); ``known`` tells by point where it stands in the plan."""
    return tuple(
        ("" if flag.point < 0 else str(flag.point), known.get(flag.point, ""), flag.flag.replace("_", " "), flag.text)
        for flag in part.flags
    )


