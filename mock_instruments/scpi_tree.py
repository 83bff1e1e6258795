"""Tables of commands: what an instrument understands, and what a unit that was read means in such a table.

Patterns are written as the standard prints them: ``[SOURce:]VOLTage[:LEVel]``, capitals the short form,
brackets what may be left out, ``#n`` behind a mnemonic where a numeric suffix 1..n is allowed
(``SENSe#2``).
"""

import itertools
import math
import re
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Literal

from mock_instruments.scpi_errors import ScpiError
from mock_instruments.scpi_reader import Block, Data, Expression, Number, Text, Unit, Word

Dimension = Literal["", "V", "A", "S", "HZ", "OHM", "CEL", "H"]
Reply = str | bytes | None

# Multipliers of IEEE 488.2 table 7-2. M is milli, except before HZ and OHM, where it is mega; MA is mega
# everywhere.
_MULTIPLIERS = {
    "EX": 1e18,
    "PE": 1e15,
    "T": 1e12,
    "G": 1e9,
    "MA": 1e6,
    "K": 1e3,
    "M": 1e-3,
    "U": 1e-6,
    "N": 1e-9,
    "P": 1e-12,
    "F": 1e-15,
}
_MEGA_BEFORE = ("HZ", "OHM")
INFINITY, NOT_A_NUMBER = 9.9e37, 9.91e37  # SCPI-1999 vol. 1, 7.2.1


@dataclass(frozen=True, slots=True)
class Decimal:
    """A number within bounds, in ``unit``; MIN, MAX and DEF stand for the bounds and the default."""

    unit: Dimension = ""
    low: float = -math.inf
    high: float = math.inf
    default: float | None = None
    integer: bool = False

    def read(self, datum: Data) -> float:
        value = self.named(datum) if isinstance(datum, Word) else _decimal(datum, self.unit)
        if not self.low <= value <= self.high:
            raise ScpiError(-222, f"{value:g}")
        return float(round(value)) if self.integer else value

    def named(self, datum: Data) -> float:
        if not isinstance(datum, Word):
            raise ScpiError(-104)
        for names, value in (
            (("MIN", "MINIMUM"), self.low),
            (("MAX", "MAXIMUM"), self.high),
            (("DEF", "DEFAULT"), self.default),
        ):
            if datum.text in names and value is not None and math.isfinite(value):
                return value
        if datum.text in ("INF", "INFINITY"):
            return INFINITY
        raise ScpiError(
            -224 if datum.text in ("MIN", "MAX", "DEF", "MINIMUM", "MAXIMUM", "DEFAULT", "NAN") else -104,
            datum.text,
        )


@dataclass(frozen=True, slots=True)
class Boolean:
    def read(self, datum: Data) -> bool:
        if isinstance(datum, Word):
            if datum.text in ("ON", "OFF"):
                return datum.text == "ON"
            raise ScpiError(-224, datum.text)
        return round(_decimal(datum, "")) != 0


@dataclass(frozen=True, slots=True)
class Choice:
    """One of some words, given as the standard prints them; read as their short form."""

    words: tuple[str, ...]

    def read(self, datum: Data) -> str:
        if not isinstance(datum, Word):
            raise ScpiError(_not_allowed(datum))
        for word in self.words:
            if datum.text in (short_form(word), word.upper()):
                return short_form(word)
        raise ScpiError(-224, datum.text)


@dataclass(frozen=True, slots=True)
class Quoted:
    """A string in quotes."""

    def read(self, datum: Data) -> str:
        if not isinstance(datum, Text):
            raise ScpiError(_not_allowed(datum))
        return datum.text


@dataclass(frozen=True, slots=True)
class Channels:
    """A channel list such as ``(@1,3:5)`` (SCPI-1999 vol. 1, 8.3.2), of numbers between ``low`` and ``high``."""

    low: int = 1
    high: int = 9999

    def read(self, datum: Data) -> tuple[int, ...]:
        if not isinstance(datum, Expression):
            raise ScpiError(_not_allowed(datum))
        text = datum.text.replace(" ", "")
        if not re.fullmatch(r"@(\d+(:\d+)?)(,\d+(:\d+)?)*", text):
            raise ScpiError(-171, datum.text)
        found: list[int] = []
        for entry in text[1:].split(","):
            first, _, last = entry.partition(":")
            a, b = int(first), int(last or first)
            if not (self.low <= min(a, b) and max(a, b) <= self.high):
                raise ScpiError(-222, entry)
            found += range(a, b + 1) if b >= a else range(a, b - 1, -1)
        return tuple(found)


Parameter = Decimal | Boolean | Choice | Quoted | Channels


@dataclass(frozen=True, slots=True)
class Command:
    """One header: what to do with it (``do``), what to answer (``ask``), and the parameters of either.

    ``do(*values)`` and ``ask(*values)`` get the parameters read; with ``numbered`` the numeric suffixes
    come first, as one tuple. The last ``optional`` parameters may be left out and then are not passed.
    """

    pattern: str
    do: Callable[..., None] | None = None
    ask: Callable[..., Reply] | None = None
    takes: tuple[Parameter, ...] = ()
    asks: tuple[Parameter, ...] = ()
    optional: int = 0
    numbered: bool = False


class Tree:
    """A table of commands, ready for lookup."""

    def __init__(self, commands: Iterable[Command]) -> None:
        self._names: dict[
            str, set[str]
        ] = {}  # a form as sent: the mnemonics it may stand for (STAT: STATE, STATUS)
        self._found: dict[tuple[str, ...], tuple[Command, tuple[int, ...]]] = {}
        self._resolved: dict[tuple[str, ...], tuple[Command, tuple[int, ...]]] = {}
        for command in commands:
            for nodes in _spellings(command.pattern):
                path = tuple(name.upper() for name, _ in nodes)
                for name, _ in nodes:
                    for form in (short_form(name), name.upper()):
                        self._names.setdefault(form, set()).add(name.upper())
                if path in self._found and self._found[path][0] is not command:
                    raise ValueError(
                        f"{':'.join(path)} stands in {command.pattern} and in {self._found[path][0].pattern}"
                    )
                self._found[path] = (command, tuple(most for _, most in nodes))

    def find(self, nodes: tuple[str, ...]) -> tuple[Command, tuple[int, ...]]:
        """The command of a full path of mnemonics as sent, and its numeric suffixes (1 where none was sent)."""
        if nodes not in self._resolved:
            if len(self._resolved) > 4096:  # a client that sends rubbish for ever must not fill the memory
                self._resolved.clear()
            self._resolved[nodes] = self._find(nodes)
        return self._resolved[nodes]

    def _find(self, nodes: tuple[str, ...]) -> tuple[Command, tuple[int, ...]]:
        candidates, suffixes = [], []
        for node in nodes:
            bare = node.rstrip("0123456789")
            plain = node in self._names
            candidates.append(self._names.get(node if plain else bare, set()))
            suffixes.append(None if plain or bare == node else int(node[len(bare) :]))
        found = next(
            (self._found[path] for path in itertools.product(*candidates) if path in self._found), None
        )
        if found is None:
            raise ScpiError(-113, ":".join(nodes))
        command, most = found
        for sent, limit in zip(suffixes, most, strict=True):
            if sent is not None and not 1 <= sent <= limit:
                raise ScpiError(-114, ":".join(nodes))
        return command, tuple(sent or 1 for sent, limit in zip(suffixes, most, strict=True) if limit)


def carry_out(command: Command, suffixes: tuple[int, ...], unit: Unit) -> Reply:
    """Check a unit's parameters against its command and run it."""
    action = command.ask if unit.query else command.do
    if action is None:
        raise ScpiError(-113, ":".join(unit.nodes) + ("?" if unit.query else ""))
    kinds = command.asks if unit.query else command.takes
    # A query of a setting may ask for its bounds instead: VOLT? MAX.
    if unit.query and not kinds and unit.data and command.takes and isinstance(command.takes[-1], Decimal):
        if len(unit.data) > 1:
            raise ScpiError(-108)
        return number(command.takes[-1].named(unit.data[0]))
    if len(unit.data) > len(kinds):
        raise ScpiError(-108)
    if len(unit.data) < len(kinds) - (0 if unit.query else command.optional):
        raise ScpiError(-109)
    values: list[Any] = [kind.read(datum) for kind, datum in zip(kinds, unit.data, strict=False)]
    return action(suffixes, *values) if command.numbered else action(*values)


def short_form(name: str) -> str:
    """Short form of a mnemonic printed as ``VOLTage``: its capitals (SCPI-1999 vol. 1, 6.2.1)."""
    return "".join(c for c in name if not c.islower())


def number(value: float) -> str:
    """NR3 with enough digits that nothing is lost that an instrument could mean."""
    if math.isnan(value):
        return "9.91E+37"
    if math.isinf(value):
        return "9.9E+37" if value > 0 else "-9.9E+37"
    return f"{value:+.9E}"


def block(data: bytes) -> bytes:
    """Definite-length block (IEEE 488.2, 8.7.9; the form of 7.7.6)."""
    count = str(len(data)).encode()
    return b"#" + str(len(count)).encode() + count + data


def _decimal(datum: Data, unit: Dimension) -> float:
    if not isinstance(datum, Number):
        raise ScpiError(_not_allowed(datum) if not isinstance(datum, Word) else -104)
    return datum.value * _scale(datum.suffix, unit)


def _scale(suffix: str, unit: Dimension) -> float:
    if not suffix or suffix == unit:
        return 1.0
    if not unit:
        raise ScpiError(-138, suffix)
    if unit == "CEL" and suffix == "C":
        return 1.0
    multiplier = suffix.removesuffix(unit)
    if multiplier == suffix or multiplier not in _MULTIPLIERS or unit == "CEL":
        raise ScpiError(-131, suffix)
    return 1e6 if multiplier == "M" and unit in _MEGA_BEFORE else _MULTIPLIERS[multiplier]


def _not_allowed(datum: Data) -> int:
    kinds: Sequence[tuple[type, int]] = (
        (Number, -128),
        (Word, -148),
        (Text, -158),
        (Block, -168),
        (Expression, -178),
    )
    return next(number for kind, number in kinds if isinstance(datum, kind))


_PIECE = re.compile(r"(\[)?(:?)([A-Za-z_]+)(?:#(\d+))?(:?)(\])?")


def _spellings(pattern: str) -> Iterable[list[tuple[str, int]]]:
    """Every way to leave out optional nodes, as (mnemonic, largest suffix or 0)."""
    pieces = [((found[3], int(found[4] or 0)), bool(found[1])) for found in _PIECE.finditer(pattern)]
    for keep in itertools.product(*((True, False) if optional else (True,) for _, optional in pieces)):
        nodes = [node for (node, _), kept in zip(pieces, keep, strict=True) if kept]
        if nodes:
            yield nodes
