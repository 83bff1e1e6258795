"""Numbers as a practitioner writes them: SI prefixes, and as many digits as the uncertainty supports.

Everything here is text in, or numbers in and text out. The rule for digits is one: the uncertainty is given
to two significant digits and the value is rounded to the same place (GUM 7.2.6). One prefix serves a whole
column, so that numbers under each other can be compared by eye. The minus sign is the typographic one,
because the result is read by people; machines read the CSV files, which are written elsewhere.
"""

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import TypeVar

from runner.arrays import FloatArray

_Numbers = TypeVar("_Numbers", float, FloatArray)
NOTHING = "–"
MINUS = "\N{MINUS SIGN}"

# SI Brochure, 9th edition, table 7; without those that no bench needs.
_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}
_SYMBOLS = {"ohm": "Ω", "degC": "°C", "1": ""}
# GUM 7.2.6 rounds 10.47 up to 11 but 28.05 down to 28: rounding to the nearest is used unless it would take
# more than this fraction off the uncertainty, which happens only for leading digits 10 to 19.
_LARGEST_UNDERSTATEMENT = 0.025


@dataclass(frozen=True, slots=True)
class Scale:
    """A unit with an SI prefix: ``number / factor`` is what stands before ``unit``."""

    factor: float
    unit: str

    def of(self, numbers: _Numbers) -> _Numbers:
        """SI number, or an array of them, in this unit."""
        return numbers / self.factor


@dataclass(frozen=True, slots=True)
class IntervalText:
    """A value and its interval, all rounded to the same place, without the unit."""

    value: str
    low: str
    high: str
    half_width: str


def scale_for(numbers: Iterable[float], unit: str) -> Scale:
    """Prefix that puts the largest of ``numbers`` between 1 and 1000.

    Args:
        numbers: SI values; those that are not finite do not count.
        unit: SI unit without prefix, in the spelling of the record (``ohm``, ``A``).

    Returns:
        The scale; factor 1 if there is no finite number other than zero.
    """
    largest = max((abs(x) for x in numbers if math.isfinite(x)), default=0.0)
    # 999.96 would be printed as 1000: the next prefix is taken as soon as three digits round up to it.
    power = 3 * math.floor(math.log10(largest * (1 + 5e-4)) / 3) if largest > 0 else 0
    power = min(max(power, min(_PREFIXES)), max(_PREFIXES))
    return Scale(10.0**power, _PREFIXES[power] + _SYMBOLS.get(unit, unit))


def round_uncertainty(uncertainty: float) -> tuple[float, int]:
    """Round an uncertainty to two significant digits.

    Args:
        uncertainty: positive and finite, in any unit.

    Returns:
        The rounded uncertainty and the number of decimal places that belongs to it (negative: tens,
        hundreds).

    Raises:
        ValueError: ``uncertainty`` is not a positive finite number.

    Source: GUM (JCGM 100:2008) 7.2.6: at most two significant digits; rounding up where rounding to the
        nearest would noticeably understate.
    """
    if not (math.isfinite(uncertainty) and uncertainty > 0):
        raise ValueError(f"an uncertainty must be positive and finite, got {uncertainty!r}")
    places = 1 - math.floor(math.log10(uncertainty))
    rounded = round(uncertainty, places)
    if rounded < uncertainty * (1 - _LARGEST_UNDERSTATEMENT):
        rounded = round(rounded + 10.0**-places, places)
    if rounded >= 10.0 ** (2 - places):  # 9.96 became 10: one place fewer
        places -= 1
    return rounded, places


def interval_text(value: float, low: float, high: float, *, factor: float = 1.0) -> IntervalText:
    """Write a value with its interval so that only meaningful digits show.

    Args:
        value, low, high: SI; the interval may be lop-sided; NaN is written as a dash.
        factor: of the prefix in use, see `scale_for`.

    Returns:
        Texts of equal decimal places. Without a usable interval the value gets four significant digits.
    """
    half_width = max(high - value, value - low) / factor
    if not (math.isfinite(half_width) and half_width > 0 and math.isfinite(value)):
        return IntervalText(significant(value / factor, 4), NOTHING, NOTHING, NOTHING)
    rounded, places = round_uncertainty(half_width)
    return IntervalText(
        value=fixed(value / factor, places),
        low=fixed(low / factor, places),
        high=fixed(high / factor, places),
        half_width=fixed(rounded, places),
    )


def fixed(number: float, places: int) -> str:
    """Number with that many decimals; negative ``places`` round to tens and hundreds."""
    if not math.isfinite(number):
        return NOTHING
    rounded = round(number, places) + 0.0  # adding zero turns -0.0 into 0.0
    return f"{rounded:.{max(places, 0)}f}".replace("-", MINUS)


def significant(number: float, digits: int) -> str:
    """Number with that many significant digits, trailing zeros kept, never in exponent form."""
    if not math.isfinite(number):
        return NOTHING
    if number == 0:
        return "0"
    places = digits - 1 - math.floor(math.log10(abs(number)))
    if abs(round(number, places)) >= 10.0 ** (digits - places):  # 9.9996 became 10.000
        places -= 1
    return fixed(number, places)


def quantity(number: float, unit: str, digits: int = 3) -> str:
    """A value whose uncertainty is not known, with prefix and unit: ``22.0 µH``."""
    if not math.isfinite(number):
        return NOTHING
    scale = scale_for([number], unit)
    return f"{significant(scale.of(number), digits)} {scale.unit}".rstrip()


def short(number: float, unit: str, digits: int = 4) -> str:
    """A value as somebody set it, trailing zeros dropped: ``22 µH``, ``2.5 µs``."""
    if not math.isfinite(number):
        return NOTHING
    scale = scale_for([number], unit)
    text = significant(scale.of(number), digits)
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return f"{text} {scale.unit}".rstrip()


def percent(fraction: float, places: int = 0) -> str:
    """``0.3`` as ``30 %``, with more places where the number has them (12.5 %)."""
    if not math.isfinite(fraction):
        return NOTHING
    number = round(100 * fraction, 6)
    while places < 3 and round(number, places) != number:
        places += 1
    return f"{fixed(number, places)} %"


def signed_percent(fraction: float, places: int) -> str:
    """A relative margin with its sign: ``+12.3 %``; zero has none."""
    text = fixed(100 * fraction, places)
    has_sign = text == NOTHING or text.startswith(MINUS) or not text.strip("0.")
    return f"{text if has_sign else '+' + text} %" if text != NOTHING else NOTHING


def celsius(temperature_degC: float, places: int = 1) -> str:
    """``25.1 °C``."""
    if not math.isfinite(temperature_degC):
        return NOTHING
    return f"{fixed(temperature_degC, places)} °C"


def duration(seconds: float) -> str:
    """A span of time as people say it: ``9 h 24 min``, ``12 min``, ``45 s``."""
    if not math.isfinite(seconds):
        return NOTHING
    if seconds < 90:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes} min" if hours else f"{minutes} min"
