"""Whatever else the extraction found, as tables: derating, margins, core view, comparisons, studies.

The result may hold more than its contract names. Such an extra is a list of records (or one record), and its keys
say what the numbers are: ``ampere``, ``tesla``, ``temperature_degC``, each perhaps followed by ``low`` and ``high``.
From that a table can be made without knowing what the numbers mean, so a new study of the extraction shows on the page
without a change here; titles of the known ones stand in `TITLES`.
"""

import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

from runner.report.digits import (
    NOTHING,
    fixed,
    interval_text,
    percent,
    scale_for,
    significant,
)
from runner.report.facts import number
from runner.report.tables import Table

# Shown elsewhere on the page, or known to the reader from there.
ELSEWHERE = frozenset(
    {
        "initial_inductance", "saturation_current", "winding_resistance", "budget",
        "margin", "rated_current", "inductance_kind",
        "inductance", "resistance", "description",
        "cross_check", "sentences", "label", "flags", "methods",
    }
)  # fmt: skip

TITLES = {
    "derating": "Derating: largest current advised",
    "core_view": "Seen from the core",
    "temperature_coefficient": "Temperature coefficient of the saturation current",
    "remanence": "Remanence study",
}

# Keys of a record that carry a value: heading and unit.
_QUANTITIES = {
    "ampere": ("Current", "A"),
    "henry": ("Inductance", "H"),
    "ohm": ("Resistance", "ohm"),
    "tesla": ("Flux density", "T"),
    "ampere_per_metre": ("Field strength", "A/m"),
    "weber": ("Flux linkage", "Wb"),
    "joule": ("Energy", "J"),
    "second": ("Time", "s"),
    "volt": ("Voltage", "V"),
    "ampere_turns": ("Magnetomotive force", "A"),
}
_FRACTIONS = {
    "drop": "Drop",
    "fraction": "Fraction",
    "margin": "Margin",
    "guard_band": "Guard band",
    "share": "Share",
}
_INTERVAL = ("low", "high")


def extra_tables(extras: Mapping[str, Any], coverage: float) -> Iterator[Table]:
    """A table for each extra that is a record or a list of records; other values are left to `extra_texts`."""
    for key, value in extras.items():
        records = [value] if isinstance(value, Mapping) else value
        if key in ELSEWHERE or not _are_records(records):
            continue
        table = _table(TITLES.get(key, _words(key)), records, coverage)
        if table.rows:
            yield table


def extra_texts(extras: Mapping[str, Any]) -> Iterator[str]:
    """Sentences among the extras, and single numbers with their names."""
    for key, value in extras.items():
        if key in ELSEWHERE:
            continue
        if isinstance(value, str):
            yield value if value.endswith(".") else f"{_words(key)}: {value}."
        elif isinstance(value, bool):
            yield f"{_words(key)}: {'yes' if value else 'no'}."
        elif isinstance(value, int | float):
            yield f"{_words(key)}: {significant(float(value), 4)}."


def _are_records(value: object) -> bool:
    return isinstance(value, Sequence) and bool(value) and all(isinstance(row, Mapping) for row in value)


def _table(title: str, records: Sequence[Mapping[str, Any]], coverage: float) -> Table:
    keys = list(dict.fromkeys(key for record in records for key in record if not _is_nested(records, key)))
    has_interval = all(key in keys for key in _INTERVAL)
    # The interval belongs to the quantity it follows; its digits serve both.
    owner = (
        next((key for key in reversed(keys[: keys.index("low")]) if _is_value(key)), None)
        if has_interval
        else None
    )
    head, columns = [], []
    for key in keys:
        if owner is not None and key in _INTERVAL:
            continue
        if key == owner:
            made = _with_interval(records, key, coverage)
            head += made[0]
            columns += made[1]
            continue
        heading, cells = _plain(records, key)
        head.append(heading)
        columns.append(cells)
    return Table(title, tuple(head), tuple(zip(*columns, strict=True)) if columns else ())


def _with_interval(
    records: Sequence[Mapping[str, Any]], key: str, coverage: float
) -> tuple[list[str], list[list[str]]]:
    rows = [tuple(number(record.get(k)) for k in (key, *_INTERVAL)) for record in records]
    if key in _FRACTIONS:
        factor, unit = 0.01, "%"
    else:
        scale = scale_for([x for row in rows for x in row], _QUANTITIES[key][1])
        factor, unit = scale.factor, scale.unit
    texts = [interval_text(*row, factor=factor) for row in rows]
    heads = [f"{_heading(key)} ({unit})", f"{percent(coverage)} interval ({unit})"]
    bounds = [f"{t.low} to {t.high}" if t.low != NOTHING else NOTHING for t in texts]
    return heads, [[t.value for t in texts], bounds]


def _plain(records: Sequence[Mapping[str, Any]], key: str) -> tuple[str, list[str]]:
    values = [record.get(key) for record in records]
    if key.endswith("_degC"):
        return f"{_heading(key)} (°C)", [fixed(number(value), 1) for value in values]
    if key in _FRACTIONS:
        return _heading(key), [percent(number(value), 1 if key != "drop" else 0) for value in values]
    if key in _QUANTITIES:
        scale = scale_for((number(value) for value in values), _QUANTITIES[key][1])
        return f"{_heading(key)} ({scale.unit})", [
            significant(scale.of(number(value)), 4) for value in values
        ]
    return _heading(key), [_cell(value) for value in values]


def _cell(value: object) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return significant(value, 4) if math.isfinite(value) else NOTHING
    return NOTHING if value is None else str(value)


def _is_value(key: str) -> bool:
    return key in _QUANTITIES or key in _FRACTIONS


def _is_nested(records: Iterable[Mapping[str, Any]], key: str) -> bool:
    return any(isinstance(record.get(key), Mapping | list) for record in records)


def _heading(key: str) -> str:
    if key == "temperature_degC":
        return "Temperature"
    if key in _FRACTIONS:
        return _FRACTIONS[key]
    return _QUANTITIES[key][0] if key in _QUANTITIES else _words(key.removesuffix("_degC"))


def _words(key: str) -> str:
    return key.replace("_", " ").capitalize()
