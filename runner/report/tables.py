"""Tables of the page, as rows of ready text: the template only sets them.

In a column every number has the unit of the head and as many digits as its own interval supports (see
`digits`).
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from runner.report.digits import (
    NOTHING,
    IntervalText,
    celsius,
    fixed,
    interval_text,
    percent,
    round_uncertainty,
    scale_for,
    short,
    significant,
)
from runner.report.facts import (
    INDUCTANCE,
    METHOD_TITLES,
    AtTemperature,
    Facts,
    Knee,
    MethodFacts,
    PartFacts,
    number,
)
from runner.report.words import counted_from, short_margin

DROPS_A_TABLE = 3
MOST_BUDGETS = 8
WORTH_TELLING = 0.02  # of the whole uncertainty; smaller contributions are told together


@dataclass(frozen=True, slots=True)
class Table:
    """Head and rows of equal length; ``groups`` (text, columns spanned) stand above the head."""

    title: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""
    groups: tuple[tuple[str, int], ...] = ()


def knee_tables(facts: Facts, part: PartFacts, method: MethodFacts) -> tuple[Table, ...]:
    """Isat by temperature (rows) and drop (groups of columns), with interval and margin to the rated current.

    Three drops fit the width of a page; more go into further tables.
    """
    drops = method.drops
    return tuple(
        _knee_table(facts, part, method, drops[first : first + DROPS_A_TABLE])
        for first in range(0, len(drops), DROPS_A_TABLE)
    )


def _knee_table(facts: Facts, part: PartFacts, method: MethodFacts, drops: tuple[float, ...]) -> Table:
    scale = scale_for([x for k in method.knees for x in (k.estimate.value, k.estimate.low)], "A")
    by_place = {(knee.temperature_degC, knee.drop): knee for knee in method.knees}
    has_rating = part.rated_current > 0

    def cells(knee: Knee | None) -> tuple[str, ...]:
        if knee is None:
            value, interval = NOTHING, NOTHING
        elif knee.is_reached:
            text = interval_text(
                knee.estimate.value, knee.estimate.low, knee.estimate.high, factor=scale.factor
            )
            value, interval = text.value, _interval(text)
        else:
            # Any status is shown under its own name: the report does not know better than the extraction.
            seen = significant(scale.of(knee.estimate.low), 3)
            value, interval = knee.status, f"> {seen}" if seen != NOTHING else NOTHING
        margin = short_margin(knee, part.rated_current) if knee else NOTHING
        return (value, interval, margin) if has_rating else (value, interval)

    references = sorted({knee.reference for knee in method.knees})
    note = f"Drop of the {INDUCTANCE[method.name]}, {'; '.join(counted_from(r) for r in references)}."
    if has_rating:
        note += f" Margin: saturation current over the rated {short(part.rated_current, 'A')}, less one."
    head = ["Isat", f"{percent(facts.coverage)} interval"] + (["margin"] if has_rating else [])
    return Table(
        f"Saturation current of {part.label} ({scale.unit}), {METHOD_TITLES[method.name].lower()}",
        ("Temperature (°C)", *(head * len(drops))),
        tuple(
            (
                fixed(temperature, 1),
                *(text for drop in drops for text in cells(by_place.get((temperature, drop)))),
            )
            for temperature in sorted({knee.temperature_degC for knee in method.knees})
        ),
        note,
        (("", 1), *((f"{percent(drop)} drop", len(head)) for drop in drops)),
    )


def together_table(facts: Facts, drop: float) -> Table:
    """The lowest saturation current of each part at one drop, a line a part."""
    worst = []
    for part in facts.parts:
        method = next((m for m in part.methods if m.knees_at(drop)), None)
        reached = [knee for knee in method.knees_at(drop) if knee.is_reached] if method else []
        worst.append((part, method, min(reached, key=lambda knee: knee.estimate.value, default=None)))
    scale = scale_for([knee.estimate.value for _, _, knee in worst if knee], "A")
    rows = []
    for part, method, knee in worst:
        name = method.name if method else NOTHING
        if knee is None:
            rows.append((part.label, name, NOTHING, "not reached" if method else NOTHING, NOTHING, NOTHING))
            continue
        estimate = knee.estimate
        text = interval_text(estimate.value, estimate.low, estimate.high, factor=scale.factor)
        margin = short_margin(knee, part.rated_current) if part.rated_current > 0 else NOTHING
        rows.append((part.label, name, fixed(knee.temperature_degC, 1), text.value, _interval(text), margin))
    head = (
        "Part",
        "Method",
        "At (°C)",
        f"Isat ({scale.unit})",
        f"{percent(facts.coverage)} interval",
        "Margin to rating",
    )
    return Table(f"Lowest saturation current of each part, {percent(drop)} drop", head, tuple(rows))


def temperature_table(
    facts: Facts, quantity: str, entries: Sequence[AtTemperature], unit: str, *, title: str
) -> Table:
    """A quantity by temperature with its interval; ``title`` may be empty."""
    scale = scale_for([entry.estimate.value for entry in entries], unit)
    rows = []
    for entry in entries:
        text = interval_text(
            entry.estimate.value, entry.estimate.low, entry.estimate.high, factor=scale.factor
        )
        rows.append((fixed(entry.temperature_degC, 1), text.value, _interval(text)))
    head = (
        "Temperature (°C)",
        f"{quantity} ({scale.unit})",
        f"{percent(facts.coverage)} interval ({scale.unit})",
    )
    return Table(title, head, tuple(rows))


def budget_table(method: MethodFacts, drop: float | None) -> Table | None:
    """Contributions to the standard uncertainty of Isat at one drop: the largest first, a column a temperature.

    None when the result has no budget for the drop. With many temperatures some are left out, evenly.
    """
    entries = [
        (number(entry.get("temperature_degC")), _contributions(entry))
        for entry in method.extras.get("budget") or []
        if number(entry.get("drop")) == drop
    ]
    entries = sorted((entry for entry in entries if entry[1]), key=lambda entry: entry[0])
    if drop is None or not entries:
        return None
    left_out = len(entries) - MOST_BUDGETS
    if left_out > 0:
        entries = [entries[round(k * (len(entries) - 1) / (MOST_BUDGETS - 1))] for k in range(MOST_BUDGETS)]
    totals = [math.sqrt(sum(u**2 for u in contributions.values())) for _, contributions in entries]
    scale = scale_for(totals, "A")
    largest = _largest_shares([contributions for _, contributions in entries], totals)
    told = sorted(
        (name for name in largest if largest[name] >= WORTH_TELLING), key=lambda name: -largest[name]
    )
    rows = [
        (name, *(_two_digits(scale.of(contributions.get(name, math.nan))) for _, contributions in entries))
        for name in told
    ]
    if len(told) < len(largest):
        rest = [math.sqrt(sum(u**2 for n, u in c.items() if n not in told)) for _, c in entries]
        small = ", ".join(name for name in largest if name not in told)
        rows.append((f"the rest ({small})", *(_two_digits(scale.of(u)) for u in rest)))
    rows.append(("all together", *(_two_digits(scale.of(total)) for total in totals)))
    return Table(
        f"Where the uncertainty of the saturation current at {percent(drop)} drop comes from",
        (f"Standard uncertainty ({scale.unit})", *(celsius(temperature, 0) for temperature, _ in entries)),
        tuple(rows),
        "Combined as independent of each other. Other drops"
        + (" and temperatures" if left_out > 0 else "")
        + " stand in result.json.",
    )


def cross_check_table(part: PartFacts) -> Table | None:
    """What comparing the two methods gave, a line a comparison; None when they were not compared."""
    rows = tuple(
        (fixed(number(row.get("temperature_degC")), 1), str(row.get("text", "")))
        for row in part.extras.get("cross_check") or []
    )
    return Table("", ("Temperature (°C)", "Comparison"), rows) if rows else None


def _largest_shares(budgets: Sequence[Mapping[str, float]], totals: Sequence[float]) -> dict[str, float]:
    """Each contribution over the whole, where it is largest."""
    shares: dict[str, float] = {}
    for contributions, total in zip(budgets, totals, strict=True):
        for name, u in contributions.items():
            shares[name] = max(shares.get(name, 0.0), u / total)
    return shares


def _contributions(entry: Mapping[str, Any]) -> dict[str, float]:
    found = (
        (str(c.get("name", "")), number(c.get("standard_uncertainty")))
        for c in entry.get("contributions") or []
    )
    return {name: u for name, u in found if u > 0}


def _two_digits(uncertainty: float) -> str:
    return fixed(*round_uncertainty(uncertainty)) if uncertainty > 0 else NOTHING


def _interval(text: IntervalText) -> str:
    return NOTHING if text.low == NOTHING else f"{text.low} to {text.high}"
