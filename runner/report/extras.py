"""Whatever else the extraction found, as tables: derating, core view, comparisons, studies.

The result may hold more than its contract names. Such an extra is a list of records (or one record), and its
keys say what the numbers are: ``ampere``, ``tesla``, ``temperature_degC``, a value perhaps followed by ``low``
and ``high``. From that a table can be made without knowing what the numbers mean, so a new study of the extraction
shows on the page without a change here; titles of the known ones stand in `TITLES`.

Records at a temperature and a drop are laid out like the saturation current: temperatures down, drops across.
"""

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from runner.report.digits import NOTHING, Scale, fixed, interval_text, percent, scale_for, significant
from runner.report.facts import number
from runner.report.tables import Table

# Shown elsewhere on the page, or known to the reader from there.
ELSEWHERE = frozenset(
    {
        "initial_inductance", "saturation_current", "winding_resistance", "budget", "margin", "rated_current",
        "inductance", "inductance_kind", "resistance", "description", "cross_check", "sentences", "label", "flags",
        "methods",
    }
)  # fmt: skip

TITLES = {
    "derating": "Derating: largest current advised",
    "core_view": "Seen from the core",
    "temperature_coefficient": "Temperature coefficient of the saturation current",
    "left_out_error": "Check: inductance at each temperature, predicted from the other temperatures (rms and largest error)",
    "branches": "Way down against way up: largest difference of the inductance, as a share of its initial value",
    "self_heating": "Winding against body sensor while direct current flows",
    "remanence": "Remanence study: first shot against conditioned shots",
    "remanence_offset": "Remanence study: what an offset field does to the conditioned knee",
    "remanence_polarity": "Remanence study: one polarity against the other",
}

# Keys of a record that carry a quantity: heading and SI unit; "%" for fractions, which are written in per cent.
_QUANTITIES = {
    "ampere": ("Current", "A"),
    "henry": ("Inductance", "H"),
    "ohm": ("Resistance", "ohm"),
    "tesla": ("B", "T"),
    "ampere_per_metre": ("H", "A/m"),
    "relative_permeability": ("µr", ""),
    "weber": ("Flux linkage", "Wb"),
    "joule": ("Energy", "J"),
    "second": ("Time", "s"),
    "volt": ("Voltage", "V"),
    "ampere_turns": ("Magnetomotive force", "A"),
    "fraction": ("Fraction", "%"),
    "largest": ("Largest", "%"),
    "share": ("Share", "%"),
    "guard_band": ("Guard band", "%"),
    "drop": ("Drop", "%"),
    "fraction_per_kelvin": ("Change", "%/K"),
    "kelvin_per_watt": ("Thermal resistance", "K/W"),
    "kelvin": ("Temperature difference", "K"),
}
_COORDINATES = ("temperature_degC", "drop")
_INTERVAL = ("low", "high")


@dataclass(frozen=True, slots=True)
class _Column:
    """A head and a cell for each record."""

    head: str
    cells: tuple[str, ...]


def extra_tables(extras: Mapping[str, Any], coverage: float) -> Iterator[Table]:
    """A table for each extra that is a record or a list of records; other values are left to `extra_texts`."""
    for key, value in extras.items():
        records = [value] if isinstance(value, Mapping) else value
        if key in ELSEWHERE or not _are_records(records):
            continue
        keys = [k for k in dict.fromkeys(k for r in records for k in r) if not _is_nested(records, k)]
        title = TITLES.get(key, _words(key))
        if not keys:
            continue
        across = _across(title, records, keys, coverage) if set(_COORDINATES) <= set(keys) else None
        yield across or _plain(title, records, keys, coverage)


def extra_texts(extras: Mapping[str, Any]) -> Iterator[str]:
    """Sentences among the extras, and single numbers with their names."""
    for key, value in extras.items():
        if key in ELSEWHERE:
            continue
        if isinstance(value, str):
            yield value if value.endswith(".") else f"{_words(key)}: {value}."
        elif isinstance(value, bool | int | float):
            yield f"{_words(key)}: {_cell(value)}."


def _plain(title: str, records: Sequence[Mapping[str, Any]], keys: Sequence[str], coverage: float) -> Table:
    """A line a record."""
    columns = [column for key in keys for column in _columns(records, keys, key, coverage)]
    rows = tuple(zip(*(column.cells for column in columns), strict=True))
    return Table(title, tuple(column.head for column in columns), rows)


def _across(
    title: str, records: Sequence[Mapping[str, Any]], keys: Sequence[str], coverage: float
) -> Table | None:
    """Temperatures down, drops across; what is the same in every record goes into a note. None if two collide."""
    places = {
        (number(r["temperature_degC"]), number(r["drop"])): k
        for k, r in enumerate(records)
        if set(_COORDINATES) <= r.keys()
    }
    if len(places) < len(records):
        return None
    temperatures, drops = (sorted({place[k] for place in places}) for k in (0, 1))
    same = [
        k
        for k in keys
        if k not in _COORDINATES and len(records) > 1 and len({repr(r.get(k)) for r in records}) == 1
    ]
    columns = [
        c for k in keys if k not in (*_COORDINATES, *same) for c in _columns(records, keys, k, coverage)
    ]
    if not columns:
        return None

    def line(temperature: float) -> tuple[str, ...]:
        found = [places.get((temperature, drop)) for drop in drops]
        return tuple(NOTHING if k is None else column.cells[k] for k in found for column in columns)

    notes = [
        f"{_heading(k)}: {_columns(records, [k], k, coverage)[0].cells[0]} {_unit_after(k)}".strip()
        for k in same
    ]
    return Table(
        title,
        ("Temperature (°C)", *([column.head for column in columns] * len(drops))),
        tuple((fixed(temperature, 1), *line(temperature)) for temperature in temperatures),
        "; ".join(notes) + "." if notes else "",
        (("", 1), *((f"{percent(drop)} drop", len(columns)) for drop in drops)),
    )


def _columns(
    records: Sequence[Mapping[str, Any]], keys: Sequence[str], key: str, coverage: float
) -> list[_Column]:
    """The columns that a key makes: none for the ends of an interval, which stand beside the value before them."""
    has_interval = set(_INTERVAL) <= set(keys) and keys.index("low") > 0
    owner = keys[keys.index("low") - 1] if has_interval else None
    if owner is not None and key in _INTERVAL:
        return []
    values = [record.get(key) for record in records]
    if key.endswith("_degC"):
        return [_Column(f"{_heading(key)} (°C)", tuple(fixed(number(value), 1) for value in values))]
    is_number = all(
        value is None or (isinstance(value, int | float) and not isinstance(value, bool)) for value in values
    )
    if not is_number or (_quantity(key) is None and key != owner):
        return [_Column(_heading(key), tuple(_cell(value) for value in values))]
    scale = _scale(key, [number(value) for value in values])
    in_unit = f" ({scale.unit})" if scale.unit else ""
    if key != owner:
        return [
            _Column(_heading(key) + in_unit, tuple(_number(key, scale.of(number(value))) for value in values))
        ]
    texts = [
        interval_text(number(r.get(key)), number(r.get("low")), number(r.get("high")), factor=scale.factor)
        for r in records
    ]
    return [
        _Column(_heading(key) + in_unit, tuple(t.value for t in texts)),
        _Column(
            f"{percent(coverage)} interval{in_unit}",
            tuple(f"{t.low} to {t.high}" if t.low != NOTHING else NOTHING for t in texts),
        ),
    ]


def _scale(key: str, values: Sequence[float]) -> Scale:
    _, unit = _quantity(key) or ("", "")
    if unit.startswith("%"):
        return Scale(0.01, unit)
    return scale_for(values, unit) if unit else Scale(1.0, "")


def _number(key: str, value: float) -> str:
    # A drop or a guard band is a number that somebody set, not one that was measured.
    if key in ("drop", "guard_band"):
        return NOTHING if math.isnan(value) else f"{value:.6g}"
    return significant(value, 2 if key in ("fraction", "largest", "share") else 4)


def _cell(value: object) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return significant(value, 4)
    return NOTHING if value is None else str(value)


def _are_records(value: object) -> bool:
    return isinstance(value, Sequence) and bool(value) and all(isinstance(row, Mapping) for row in value)


def _is_nested(records: Sequence[Mapping[str, Any]], key: str) -> bool:
    return any(isinstance(record.get(key), Mapping | list) for record in records)


def _heading(key: str) -> str:
    if key == "temperature_degC":
        return "Temperature"
    known = _quantity(key)
    return known[0] if known is not None else _words(key.removesuffix("_degC"))


def _quantity(key: str) -> tuple[str, str] | None:
    """Heading and unit of a key: a known one, or words before one (``first_shot_ampere``: First shot, in amperes)."""
    if key in _QUANTITIES:
        return _QUANTITIES[key]
    known = [name for name in _QUANTITIES if key.endswith(f"_{name}")]
    if not known:
        return None
    name = max(known, key=len)
    return _words(key.removesuffix(f"_{name}")), _QUANTITIES[name][1]


def _unit_after(key: str) -> str:
    unit = (_quantity(key) or ("", ""))[1]
    return unit if unit.startswith("%") else ""


def _words(key: str) -> str:
    return key.replace("_", " ").capitalize()
