"""Values with units, as users write them: `40 us`, `-40 degC`, `30 %`, `0.2 K/min`.

Units are read by pint, from a list of the units a bench needs and no more: a long list is slow to read, and it makes
typing errors into units nobody meant. What comes out is a float in SI; temperatures come out in degC.
"""

import difflib
import functools
import math
import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from pydantic import GetCoreSchemaHandler, GetJsonSchemaHandler
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

if TYPE_CHECKING:
    import pint

# Definitions in pint's own spelling. Prefixes are those met on a bench; there is no hecto, so that 'h' is only an hour.
UNITS = """
nano- = 1e-9 = n-
pico- = 1e-12 = p-
micro- = 1e-6 = u-
milli- = 1e-3 = m-
centi- = 1e-2 = c-
kilo- = 1e3 = k-
mega- = 1e6 = M-
second = [time] = s = sec
minute = 60 * second = min
hour = 60 * minute = h = hr
metre = [length] = m = meter
kilogram = [mass] = kg
ampere = [current] = A = amp
kelvin = [temperature]; offset: 0 = K
degree_Celsius = kelvin; offset: 273.15 = degC = celsius
degree_Fahrenheit = 5 / 9 * kelvin; offset: 459.67 * 5 / 9 = degF = fahrenheit
hertz = 1 / second = Hz
joule = kilogram * metre ** 2 / second ** 2 = J
watt = joule / second = W
volt = watt / ampere = V
ohm = volt / ampere = ohm
farad = ampere * second / volt = F
henry = volt * second / ampere = H
weber = volt * second = Wb
tesla = weber / metre ** 2 = T
percent = 0.01 = percent
ppm = 1e-6 = ppm
turn = 1 = turn = turns
"""

_PATTERN = re.compile(r"\s*(?P<number>[-+\u2212]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*(?P<unit>\S.*?)?\s*")
_SPELLINGS = str.maketrans(
    {
        "\N{MICRO SIGN}": "u",
        "\N{GREEK SMALL LETTER MU}": "u",
        "\N{GREEK CAPITAL LETTER OMEGA}": "ohm",
        "\N{OHM SIGN}": "ohm",
        "\N{DEGREE CELSIUS}": "degC",
        "\N{SUPERSCRIPT TWO}": "^2",
        "\N{MIDDLE DOT}": "*",
    }
)
JSON_PATTERN = r"^\s*[-+]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][-+]?[0-9]+)?(\s*[^\s0-9.eE+,-].*|\s+1/.*)$"


@dataclass(frozen=True, slots=True)
class Kind:
    """What a value is: its name in messages, the unit it is delivered in, and how a user might write one."""

    name: str
    unit: str
    example: str

    @property
    def is_plain(self) -> bool:
        """Whether users write it in its own unit, so that a bare number leaves little doubt about what was meant."""
        return self.example.endswith(f" {self.unit}")


TIME = Kind("a time", "s", "500 ms")
WIDTH = Kind("a time", "s", "40 us")
SKEW = Kind("a time", "s", "12 ns")
DURATION = Kind("a time", "s", "5 min")
VOLTAGE = Kind("a voltage", "V", "12 V")
SMALL_VOLTAGE = Kind("a voltage", "V", "50 mV")
CURRENT = Kind("a current", "A", "6 A")
INDUCTANCE = Kind("an inductance", "H", "22 uH")
RESISTANCE = Kind("a resistance", "ohm", "18 mohm")
CAPACITANCE = Kind("a capacitance", "F", "7 mF")
ENERGY = Kind("an energy", "J", "5 mJ")
POWER = Kind("a power", "W", "2 W")
FREQUENCY = Kind("a frequency", "Hz", "100 kHz")
TEMPERATURE = Kind("a temperature", "degC", "25 degC")
DIFFERENCE = Kind("a temperature difference", "K", "1 K")
DRIFT = Kind("a rate of temperature", "K/s", "0.2 K/min")
CURRENT_RATE = Kind("a rate of current", "A/s", "5 A/s")
FRACTION = Kind("a fraction", "1", "30 %")
TEMPCO = Kind("a temperature coefficient", "1/K", "20 ppm/K")
TEMPCO_SQUARED = Kind("a second temperature coefficient", "1/K^2", "-1.5 ppm/K^2")
THERMAL_RESISTANCE = Kind("a thermal resistance", "K/W", "15 K/W")
LENGTH = Kind("a length", "m", "46 mm")
AREA = Kind("an area", "m^2", "52 mm^2")
AMPERE_TURNS = Kind("a magnetomotive force", "A", "20 A turns")
FACTOR = Kind("a plain number", "1", "1.0")  # the only kind that is written without a unit

KINDS = (
    TIME, VOLTAGE, CURRENT, INDUCTANCE, RESISTANCE, CAPACITANCE, ENERGY, POWER, FREQUENCY, TEMPERATURE, DRIFT,
    CURRENT_RATE, FRACTION, TEMPCO, TEMPCO_SQUARED, THERMAL_RESISTANCE, LENGTH, AREA,
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Quantity:
    """Pydantic annotation of a float that is written with a unit.

    Attributes:
        kind: what the value is.
        above: the value must be greater [SI unit of the kind], or None.
        least: the value must not be smaller, or None.
        below: the value must be smaller, or None.
        most: the value must not be greater, or None.
        help: one sentence for editors.
    """

    kind: Kind
    above: float | None = None
    least: float | None = None
    below: float | None = None
    most: float | None = None
    help: str = ""

    def read(self, written: object) -> float:
        """The value in SI (temperatures in degC).

        Raises:
            PydanticCustomError: not this kind of value; the text says what to write.
        """
        try:
            value = read_quantity(written, self.kind)
            self._check(value, written)
        except ValueError as error:
            raise PydanticCustomError("quantity", "{said}", {"said": str(error)}) from error
        return value

    def _check(self, value: float, written: object) -> None:
        broken = None
        if self.above is not None and not value > self.above:
            broken = f"not above {self._bound(self.above)}"
        elif self.least is not None and not value >= self.least:
            broken = f"below {self._bound(self.least)}"
        elif self.below is not None and not value < self.below:
            broken = f"not below {self._bound(self.below)}"
        elif self.most is not None and not value <= self.most:
            broken = f"above {self._bound(self.most)}"
        if broken:
            raise ValueError(f"{_shown(written)} is {broken}; write for example '{self.kind.example}'")

    def _bound(self, bound: float) -> str:
        if self.kind is FACTOR:
            return f"{bound:g}"
        if self.kind is FRACTION:
            return f"{bound * 100:g} %"
        return f"{bound:g} {self.kind.unit}"

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(self.read)

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        if self.kind is FACTOR:
            shape: dict[str, Any] = {"type": "number", "examples": [1]}
        else:
            shape = {"type": "string", "pattern": JSON_PATTERN, "examples": [self.kind.example]}
        said = f"{self.kind.name[:1].upper()}{self.kind.name[1:]}, such as {self.kind.example}."
        return shape | {"description": f"{self.help} {said}".strip()}


@functools.lru_cache(maxsize=4096)
def _read_text(text: str, kind: Kind) -> float:
    match = _PATTERN.fullmatch(text)
    if match is None:
        raise ValueError(_unreadable(text, kind))
    number, unit = match["number"].replace("\u2212", "-"), match["unit"]
    if unit is None:
        if kind is FACTOR:
            return float(number)
        raise ValueError(_bare(text, number, kind))
    if re.match(r",\d", unit):
        raise ValueError(
            f"{text!r} has a comma in its number; write a decimal point: '{text.replace(',', '.', 1)}'"
        )
    value = _in_unit(float(number), unit, text, kind)
    if not math.isfinite(value):
        raise ValueError(f"{text!r} is too large; write {kind.name}, for example '{kind.example}'")
    # Fifteen digits: what scaling by a unit adds in the sixteenth is no part of what was written.
    return float(f"{value:.15g}")


def read_quantity(written: object, kind: Kind) -> float:
    """The float [SI; degC for temperatures] that ``written`` means as a value of ``kind``.

    Raises:
        ValueError: no unit, another dimension, an unknown unit or no number; the text says what to write.
    """
    if written is None:
        raise ValueError(f"nothing stands here; write {kind.name}, for example '{kind.example}'")
    if isinstance(written, (bool, list, dict)):
        raise ValueError(f"{_shown(written)} is no value; write {kind.name}, for example '{kind.example}'")
    if isinstance(written, (int, float)):
        if not math.isfinite(written):
            raise ValueError(
                f"{written!r} is no finite number; write {kind.name}, for example '{kind.example}'"
            )
        if kind is FACTOR:
            return float(written)
        raise ValueError(_bare(f"{written!r}", f"{written:g}", kind))
    return _read_text(str(written), kind)


def shown(value: float, unit: str) -> str:
    """A value as users write it, with a prefix where one helps: ``shown(2e-5, "s")`` is ``20 us``."""
    if unit in ("degC", "K", "%") or value == 0 or not math.isfinite(value):
        return f"{value:.4g} {unit}"
    thousands = max(-3, min(2, math.floor(math.log10(abs(value)) / 3 + 1e-9)))
    if unit == "s":
        thousands = min(thousands, 0)
    prefix = {-3: "n", -2: "u", -1: "m", 0: "", 1: "k", 2: "M"}[thousands]
    return f"{value / 1000.0**thousands:.4g} {prefix}{unit}"


def _in_unit(number: float, unit_text: str, text: str, kind: Kind) -> float:
    if kind is FACTOR and unit_text != "%":
        raise ValueError(
            f"{text!r} has a unit where {kind.name} is expected; write for example {kind.example}"
        )
    try:
        unit = _parsed(unit_text)
    except ValueError as error:
        raise ValueError(f"{text!r}: {error}; write {kind.name}, for example '{kind.example}'") from None
    if kind in (DIFFERENCE, DRIFT) and str(unit) in ("degree_Celsius", "degree_Fahrenheit"):
        raise ValueError(f"{text!r} is a temperature, not {kind.name}; write it in kelvin: '{kind.example}'")
    registry = _registry()
    target = registry.parse_units("dimensionless" if kind.unit == "1" else kind.unit)
    if unit.dimensionality != target.dimensionality:
        found = _kind_named(unit)
        raise ValueError(f"{text!r} is {found}, not {kind.name}; write for example '{kind.example}'")
    if number and str(unit) == "dimensionless":
        raise ValueError(_bare(text, f"{number:g}", kind))
    return float(registry.Quantity(number, unit).to(target).magnitude)


@functools.lru_cache(maxsize=256)
def _parsed(text: str) -> "pint.Unit":
    import pint

    spelled = text.translate(_SPELLINGS).replace("°C", "degC").replace("°F", "degF").replace("%", "percent")
    if re.search(r"[^A-Za-z0-9_ ^*/().-]", spelled) or re.match(r"(?!1/)[\d-]", spelled):
        raise ValueError(f"{text!r} is no unit")
    try:
        return _registry().parse_units(spelled)
    except pint.UndefinedUnitError as error:
        unknown = str(error.args[0]) if error.args else text
        near = _near_unit(unknown)
        hint = f" (did you mean {near!r}?)" if near else ""
        raise ValueError(f"{unknown!r} is no unit known here{hint}") from None
    except Exception:  # pint's unit parser fails with whatever its tokenizer raises
        raise ValueError(f"{text!r} is no unit") from None


@functools.lru_cache(maxsize=1)
def _registry() -> "pint.UnitRegistry[Any]":
    import pint

    registry: pint.UnitRegistry[Any] = pint.UnitRegistry(None)
    registry.load_definitions(UNITS.strip().splitlines())
    return registry


COMMON_UNITS = (
    "s", "ms", "us", "ns", "min", "h", "V", "mV", "kV", "A", "mA", "uA", "H", "mH", "uH", "nH", "ohm", "mohm", "uohm",
    "kohm", "F", "mF", "uF", "nF", "J", "mJ", "uJ", "W", "mW", "kW", "Hz", "kHz", "MHz", "degC", "degF", "K", "K/min", "%",
    "ppm", "ppm/K", "mm", "mm^2", "cm", "cm^2", "m", "m^2",
)  # fmt: skip


def _near_unit(unknown: str) -> str | None:
    for unit in COMMON_UNITS:
        if unit.lower() == unknown.lower():
            return unit
    if unknown.lower() in ("c", "deg", "degree", "degrees", "oc"):
        return "degC"
    near = difflib.get_close_matches(unknown, COMMON_UNITS, n=1, cutoff=0.6)
    return near[0] if near else None


def _kind_named(unit: "pint.Unit") -> str:
    if str(unit) == "kelvin":
        return TEMPERATURE.name
    registry = _registry()
    for kind in KINDS:
        if kind.unit != "1" and registry.parse_units(kind.unit).dimensionality == unit.dimensionality:
            return kind.name
    return FRACTION.name if not unit.dimensionality else f"a value in '{unit}'"


def _bare(text: str, number: str, kind: Kind) -> str:
    value = float(number)
    if kind is FRACTION and 0 < value < 1:
        return f"{text} has no unit; write '{value * 100:g} %'"
    unit = kind.example.split(" ", 1)[1]
    if kind.is_plain or kind is FRACTION:
        return f"{text} has no unit; write '{number} {unit}'"
    return (
        f"{text} has no unit; write '{number} {kind.unit}' if that is meant, or for example '{kind.example}'"
    )


def _unreadable(text: str, kind: Kind) -> str:
    if re.match(r"\s*[-+]?\d+,\d", text):
        return f"{text!r} has a comma in its number; write a decimal point: '{text.replace(',', '.', 1)}'"
    return f"{text!r} is not {kind.name}; write a number and a unit, for example '{kind.example}'"


def _shown(written: object) -> str:
    if isinstance(written, bool):
        return "'true'" if written else "'false'"
    if written is None:
        return "nothing"
    if isinstance(written, list):
        return "a list"
    if isinstance(written, dict):
        return "a mapping"
    return repr(written)
