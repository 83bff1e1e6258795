"""Filling a dialect's messages with values, and finding what is wrong with a template beforehand. Pure.

A placeholder is `{name}`, `{name:.3f}` (a number format), or `{name/1e-6:.3f}` where the instrument wants
another unit (here microseconds) or sign; `+ - * /` and one constant are all the arithmetic there is.
"""

import math
import re
from collections.abc import Mapping

Value = float | int | str | tuple[int, ...]
Words = Mapping[str, Mapping[str, str]]

_PLACEHOLDER = re.compile(
    r"\{(?P<name>\w+)"
    r"(?:(?P<sign>[-+*/])(?P<constant>[-+]?[0-9.]+(?:[eE][-+]?[0-9]+)?))?"
    r"(?::(?P<format>[^{}]*))?\}"
)
_FORMAT = re.compile(r"\+?0?\d*(?:\.\d+)?[deEfgG]?")

# Nine digits: more than any source resolves, and few enough that 0.1 is sent as 0.1.
DEFAULT_FORMAT = ".9g"


def placeholders(template: str) -> tuple[str, ...]:
    """Names used by a template, in order.

    Raises:
        ValueError: a brace that is no placeholder, or a number format that is none.
    """
    rest = _PLACEHOLDER.sub("", template)
    if "{" in rest or "}" in rest:
        raise ValueError(
            f"{template!r} has a brace that is no placeholder; write {{name}}, {{name:.3f}} or {{name/1e-6}}"
        )
    for found in _PLACEHOLDER.finditer(template):
        if not _FORMAT.fullmatch(found["format"] or ""):
            raise ValueError(f"{found[0]!r} has no number format; write one such as ':.3f', ':.6g' or ':d'")
    return tuple(found["name"] for found in _PLACEHOLDER.finditer(template))


def fill(template: str, values: Mapping[str, Value], words: Words) -> str:
    """The message to send: every placeholder replaced by its value.

    Raises:
        KeyError: the template names a value that was not given.
        ValueError: a number is not finite, which no instrument should be asked for.
    """
    if "{" not in template:
        return template
    return _PLACEHOLDER.sub(lambda found: _spell(found, values[found["name"]], words), template)


def _spell(found: re.Match[str], value: Value, words: Words) -> str:
    if isinstance(value, str):
        return words[found["name"]][value]
    if isinstance(value, tuple):
        return ",".join(_number(item, found) for item in value)
    return _number(value, found)


def _number(value: float, found: re.Match[str]) -> str:
    if found["sign"]:
        value = _shifted(value, found["sign"], float(found["constant"]))
    if not math.isfinite(value):
        raise ValueError(f"{found['name']} must be a finite number, got {value!r}")
    spec = found["format"] or (DEFAULT_FORMAT if isinstance(value, float) else "d")
    if spec.endswith("d"):
        value = round(value)
    return format(value + 0, spec) if value else format(0 if spec.endswith("d") else 0.0, spec)  # never "-0"


def _shifted(value: float, sign: str, constant: float) -> float:
    match sign:
        case "+":
            return value + constant
        case "-":
            return value - constant
        case "*":
            return value * constant
        case _:
            return value / constant
