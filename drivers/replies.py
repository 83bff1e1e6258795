"""Reading what an instrument answers: pure functions from text to values, and the class that carries them.

The caller has taken the reply off the wire and cut off its terminator. A reply that is not what the dialect
says is a ValueError here; the conversation adds who answered what and makes it `Garbled`.
"""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field

from drivers.blocks import Samples

# SCPI-1999 vol. 1, 7.2.1.4 and 7.2.1.5: 9.9E37 is infinity, -9.9E37 its negative, 9.91E37 "not a number".
INFINITY = 9.9e37
NOT_A_NUMBER = 9.91e37
# A float32 on the way moves both by a few parts in 1e8, hence a little room on each side.
_FIRST_THAT_IS_NONE = INFINITY * (1 - 1e-6)
_BETWEEN = (INFINITY + NOT_A_NUMBER) / 2

_NUMBER = re.compile(r"\s*([-+]?(?:\d+\.?\d*|\.\d+)(?:\s*[eE]\s*[-+]?\d+)?)\s*(.*?)\s*", re.DOTALL)
_UNITS_OF_LINE = re.compile(r'(?:[^;"]|"(?:[^"]|"")*")*')


@dataclass(slots=True)
class Values:
    """What the replies to one intent brought, by name."""

    numbers: dict[str, float] = field(default_factory=dict)
    lists: dict[str, tuple[float, ...]] = field(default_factory=dict)
    flags: dict[str, bool] = field(default_factory=dict)
    texts: dict[str, str] = field(default_factory=dict)
    samples: dict[str, Samples] = field(default_factory=dict)


def split_units(line: str, separator: str) -> list[str]:
    """The replies that stand in one line, apart.

    A separator between double quotes belongs to the text: SCPI-1999 vol. 2, 21.8 puts device information into
    an error message behind a semicolon, inside the quotes.
    """
    if '"' not in line:
        return [unit.strip() for unit in line.split(separator)]
    units = [""]
    for at, piece in enumerate(line.split('"')):
        if at % 2:  # between quotes
            units[-1] += f'"{piece}"'
        else:
            first, *others = piece.split(separator)
            units[-1] += first
            units += others
    return [unit.strip() for unit in units]


def parse_number(text: str, units: Mapping[str, float] | None = None) -> float:
    """One number, in whatever way instruments write one, with one of the units the dialect allows.

    Args:
        text: such as `12`, `+1.20E+01`, `1.8012E-2 OHM`.
        units: multiplier for each unit that may stand behind the number.

    Returns:
        The number; NaN and infinities for the values by which SCPI spells them.

    Raises:
        ValueError: it is no number, or has a unit that is not among `units`.
    """
    if "_" not in text:  # which Python takes for a part of a number
        try:
            return _meant(float(text))
        except ValueError:
            pass
    if text.strip().upper() == "NINF":
        return -math.inf
    found = _NUMBER.fullmatch(text)
    if found is None:
        raise ValueError(f"{text!r} is no number")
    value, unit = _meant(float(found[1].replace(" ", ""))), found[2]
    if not unit:
        return value
    if units is None or unit not in units:
        expected = " or ".join(repr(known) for known in units) if units else "none"
        raise ValueError(f"{text!r} has the unit {unit!r}, but the dialect expects {expected}")
    return value * units[unit]


def parse_numbers(text: str, units: Mapping[str, float] | None = None) -> tuple[float, ...]:
    """Numbers with commas between; a channel list `(@101,201)` is read as its numbers. No text gives none."""
    inner = text.strip().removeprefix("(@").removesuffix(")").strip()
    return tuple(parse_number(item, units) for item in inner.split(",")) if inner else ()


def _meant(value: float) -> float:
    if abs(value) < _FIRST_THAT_IS_NONE or math.isinf(value):
        return value
    return math.copysign(math.inf, value) if value < _BETWEEN else math.nan
