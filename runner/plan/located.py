"""YAML text with a place for every value, so that each fault can be shown where it stands.

Composed nodes are read instead of finished values, because only nodes know line and column. What YAML allows and nobody
means in a plan (duplicate keys, merge keys, several documents, values that contain themselves) is refused here.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import yaml

from runner.errors import Fault, InputError

Keys = tuple[str | int, ...]

LARGEST_FILE = 4_000_000  # byte; a plan is a few kB, so a bigger file is some other file
MOST_VALUES = 200_000  # aliases can unfold a small file into a huge value


@dataclass(frozen=True, slots=True)
class Place:
    """Where a value and its key stand, counted from 1, and how a user calls it."""

    line: int
    column: int
    key_line: int
    key_column: int
    called: str


@dataclass(frozen=True, slots=True)
class Document:
    """A YAML file as plain values, with the place of each.

    Attributes:
        name: what messages call the file.
        value: mappings, lists, text, numbers, dates as YAML spells them.
        places: of every value, by its keys from the top.
    """

    name: str
    value: Any
    places: Mapping[Keys, Place]

    def fault(self, keys: Keys, what: str) -> Fault:
        """A fault at the value under ``keys``, or at the nearest value above it that stands in the file."""
        place = self.nearest(keys)
        if place.line != place.key_line:  # a section whose lines stand below its key
            return self._fault(place.key_line, place.key_column, place.called, what)
        return self._fault(place.line, place.column, place.called, what)

    def fault_at_key(self, keys: Keys, what: str) -> Fault:
        """A fault at the key of the value under ``keys``."""
        place = self.nearest(keys)
        return self._fault(place.key_line, place.key_column, place.called, what)

    def has(self, keys: Keys) -> bool:
        return keys in self.places

    def renamed(self, old: Keys, new: Keys, value: Any) -> "Document":
        """The same file read as ``value``, in which what stands under ``old`` is found under ``new``."""
        places = dict(self.places)
        for keys, place in self.places.items():
            if keys[: len(old)] == old:
                places[new + keys[len(old) :]] = place
        for length in range(1, len(new)):
            places.setdefault(new[:length], self.places[old])
        return Document(self.name, value, places)

    def nearest(self, keys: Keys) -> Place:
        """The place of the value under ``keys``, or of the nearest one above it that stands in the file."""
        while keys not in self.places:
            keys = keys[:-1]
        return self.places[keys]

    def _fault(self, line: int, column: int, called: str, what: str) -> Fault:
        where = f"{self.name}:{line}:{column}"
        return Fault(f"{where}: {called}" if called else where, what)


def dotted(keys: Keys, start: str = "") -> str:
    """``("temperatures", "at", 6)`` as ``temperatures.at[6]``."""
    called = start
    for key in keys:
        called += f"[{key}]" if isinstance(key, int) else (f".{key}" if called else key)
    return called


def read_bytes(path: Path, *, kind: str) -> bytes:
    """The bytes of a file.

    Raises:
        InputError: missing, a folder, not readable, or far too big to be a ``kind`` ("test plan").
    """
    try:
        if path.is_dir():
            raise InputError([Fault(str(path), f"is a folder; name the YAML file of a {kind}")])
        if path.stat().st_size > LARGEST_FILE:
            raise InputError([Fault(str(path), f"is too big for a {kind}; name a YAML file of a few kB")])
        return path.read_bytes()
    except FileNotFoundError as error:
        raise InputError(
            [Fault(str(path), f"no such file; name the YAML file of a {kind}{_beside(path)}")]
        ) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(
            [Fault(str(path), f"cannot be read ({reason}); check the name and its permissions")]
        ) from error


def read_document(data: bytes, name: str) -> Document:
    """Read the one YAML document in ``data``.

    Args:
        name: what messages call the file.

    Raises:
        InputError: no UTF-8 text, no YAML, no mapping at the top, duplicate keys and the like; located.
    """
    text = _decoded(data, name)
    try:
        node = yaml.compose(text, Loader=yaml.SafeLoader)
    except yaml.MarkedYAMLError as error:
        raise InputError([_syntax_fault(name, error)]) from error
    except yaml.reader.ReaderError as error:
        line, column = _line_and_column(text, error.position)
        what = f"character {error.character!r} may not stand in YAML; remove it or save the file as plain UTF-8 text"
        raise InputError([Fault(f"{name}:{line}:{column}", what)]) from error
    except RecursionError as error:
        raise InputError(
            [Fault(name, "values are nested too deeply; write the file as in the shipped examples")]
        ) from error
    if node is None:
        raise InputError(
            [Fault(f"{name}:1:1", "the file is empty; copy one of the shipped examples and change it")]
        )
    reader = _NodeReader(name)
    value = reader.read(node, (), Place(_line(node), _column(node), _line(node), _column(node), ""))
    if reader.faults:
        raise InputError(reader.faults)
    if not isinstance(value, dict):
        what = f"the file holds {_kind_of(value)} where 'key: value' lines are expected; start from a shipped example"
        raise InputError([Fault(f"{name}:{_line(node)}:{_column(node)}", what)])
    return Document(name, value, reader.places)


class _NodeReader:
    """Walks composed nodes once; collects values, places and faults."""

    def __init__(self, name: str) -> None:
        self.name = name
        self.places: dict[Keys, Place] = {}
        self.faults: list[Fault] = []
        self._constructor = yaml.constructor.SafeConstructor()
        self._open: list[yaml.Node] = []

    def read(self, node: yaml.Node, keys: Keys, place: Place) -> Any:
        self.places[keys] = place
        if len(self.places) > MOST_VALUES:
            raise InputError([Fault(self.name, "the file unfolds into too many values; write fewer aliases")])
        if node in self._open:
            self._refuse(node, place.called, "the value contains itself; write it out without the alias")
            return None
        self._open.append(node)
        try:
            if isinstance(node, yaml.MappingNode):
                return dict(self._items(node, keys, place.called))
            if isinstance(node, yaml.SequenceNode):
                return [
                    self.read(child, (*keys, index), self._place(child, child, f"{place.called}[{index}]"))
                    for index, child in enumerate(node.value)
                ]
            return self._scalar(node, place.called)
        finally:
            self._open.pop()

    def _items(self, node: yaml.MappingNode, keys: Keys, called: str) -> Iterator[tuple[str | int, Any]]:
        seen: dict[str | int, int] = {}
        for key_node, value_node in node.value:
            key = self._key(key_node, called)
            if key is None:
                continue
            child_called = dotted((key,) if isinstance(key, str) else (str(key),), called)
            if key in seen:
                what = f"the key {key!r} stands twice here (first in line {seen[key]}); keep one of them"
                self._refuse(key_node, child_called, what)
                continue
            seen[key] = _line(key_node)
            yield key, self.read(value_node, (*keys, key), self._place(key_node, value_node, child_called))

    def _key(self, node: yaml.Node, called: str) -> str | int | None:
        if node.tag == "tag:yaml.org,2002:merge":
            self._refuse(node, called, "merge keys ('<<') are not read here; write the keys out")
            return None
        if isinstance(node, yaml.ScalarNode):
            if node.tag == "tag:yaml.org,2002:int":
                value = self._scalar(node, called)
                return value if isinstance(value, int) else None
            # `on:` and `off:` are true and false to YAML 1.1; a key is what stands there.
            return str(node.value)
        self._refuse(node, called, "a key must be a single word; write 'key: value'")
        return None

    def _scalar(self, node: yaml.Node, called: str) -> Any:
        try:
            # The constructors of scalars are registered by tag; an unknown tag has the one registered for None.
            return self._constructor.construct_object(node, deep=True)
        except (yaml.MarkedYAMLError, ValueError, OverflowError) as error:
            reason = getattr(error, "problem", None) or str(error)
            self._refuse(node, called, f"{reason}; write plain text, a number or a date such as 2026-03-02")
            return None

    def _place(self, key: yaml.Node, value: yaml.Node, called: str) -> Place:
        return Place(_line(value), _column(value), _line(key), _column(key), called)

    def _refuse(self, node: yaml.Node, called: str, what: str) -> None:
        where = f"{self.name}:{_line(node)}:{_column(node)}"
        self.faults.append(Fault(f"{where}: {called}" if called else where, what))


def _decoded(data: bytes, name: str) -> str:
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before = data[: error.start]
        line = before.count(b"\n") + 1
        column = len(before) - (before.rfind(b"\n") + 1) + 1
        what = f"byte 0x{data[error.start]:02X} is no UTF-8 text; save the file as UTF-8"
        raise InputError([Fault(f"{name}:{line}:{column}", what)]) from error


def _syntax_fault(name: str, error: yaml.MarkedYAMLError) -> Fault:
    mark = error.problem_mark or error.context_mark
    where = f"{name}:{mark.line + 1}:{mark.column + 1}" if mark else name
    problem = error.problem or error.context or "something unexpected"
    if "\\t" in problem:
        return Fault(
            where, "not readable as YAML: a tab stands where spaces are expected; indent with spaces"
        )
    if "single document" in (error.context or ""):
        return Fault(where, "a second document begins here ('---'); keep one document in a file")
    opened = error.context_mark
    context = f" {error.context}" if error.context else ""
    since = f" that begins in line {opened.line + 1}" if opened and mark and opened.line < mark.line else ""
    advice = "check indentation, quotes, brackets and colons just before this place"
    return Fault(where, f"not readable as YAML{context}{since}: {problem}; {advice}")


def _line_and_column(text: str, position: int) -> tuple[int, int]:
    before = text[:position]
    return before.count("\n") + 1, position - (before.rfind("\n") + 1) + 1


def _beside(path: Path) -> str:
    """The YAML file in the same folder whose name is nearest, as a suggestion."""
    import difflib

    try:
        names = [p.name for p in path.parent.iterdir() if p.suffix in (".yaml", ".yml")]
    except OSError:
        return ""
    near = difflib.get_close_matches(path.name, names, n=1)
    return f" (there is {near[0]!r} beside it)" if near else ""


def _kind_of(value: Any) -> str:
    if isinstance(value, list):
        return "a list"
    return "nothing" if value is None else "a single value"


def _line(node: yaml.Node) -> int:
    return int(node.start_mark.line) + 1


def _column(node: yaml.Node) -> int:
    return int(node.start_mark.column) + 1
