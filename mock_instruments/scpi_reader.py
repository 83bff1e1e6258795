"""From bytes to program message units (IEEE 488.2 chapter 7, SCPI-1999 vol. 1 chapters 6 to 8). Pure: no instrument here.

`MessageReader` cuts a byte stream into messages however the bytes arrive; `read_message` cuts a message
into units and their parameters. A unit that cannot be read becomes a `Faulty` in its place, so that the
rest of a `;` chain is still answered and a client that ends its chain with `SYST:ERR?` gets told.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache

from mock_instruments.scpi_errors import ScpiError

LONGEST_MNEMONIC = 12  # IEEE 488.2, 7.6.1
LONGEST_SUFFIX = 12
LONGEST_MANTISSA = 255  # digits, IEEE 488.2, 7.7.2.4.1
LARGEST_EXPONENT = 32000  # IEEE 488.2, 7.7.2.4.1
INPUT_BUFFER = 1 << 20  # bytes without a terminator before the buffer overruns


@dataclass(frozen=True, slots=True)
class Number:
    text: str  # decimal digits as sent, spaces taken out
    suffix: str = ""  # upper case

    @property
    def value(self) -> float:
        return float(self.text)


@dataclass(frozen=True, slots=True)
class Word:
    text: str  # upper case


@dataclass(frozen=True, slots=True)
class Text:
    text: str


@dataclass(frozen=True, slots=True)
class Block:
    data: bytes


@dataclass(frozen=True, slots=True)
class Expression:
    text: str  # without the outer parentheses


Data = Number | Word | Text | Block | Expression


@dataclass(frozen=True, slots=True)
class Unit:
    """One program message unit. ``nodes``: mnemonics as sent, upper case; ``common`` for ``*IDN?`` and its kind."""

    nodes: tuple[str, ...]
    query: bool
    common: bool = False
    absolute: bool = False
    data: tuple[Data, ...] = ()


@dataclass(frozen=True, slots=True)
class Faulty:
    """A unit that could not be read, and why."""

    number: int
    detail: str = ""


class MessageReader:
    """Cuts a stream of bytes into terminated messages. A newline inside a definite-length block does not terminate."""

    def __init__(self) -> None:
        self._buffer = bytearray()
        self._scanned = 0  # everything before this has been looked at
        self._quote = 0
        self.overruns = 0

    def feed(self, data: bytes) -> Iterator[bytes]:
        """Take some bytes; yield each message they complete, without its terminator (LF, or CR LF)."""
        self._buffer += data
        while (end := self._end()) is not None:
            message = bytes(self._buffer[:end])
            del self._buffer[: end + 1]
            self._scanned = self._quote = 0
            yield message.removesuffix(b"\r")
        if len(self._buffer) > INPUT_BUFFER:
            self._buffer.clear()
            self._scanned = self._quote = 0
            self.overruns += 1

    def _end(self) -> int | None:
        buffer = self._buffer
        if b"#" not in buffer:  # the plain case, at the speed of the library's search
            end = buffer.find(b"\n", 0)
            return end if end >= 0 else None
        at = self._scanned
        while at < len(buffer):
            byte = buffer[at]
            if byte == 0x0A:
                return at
            if self._quote:
                self._quote = 0 if byte == self._quote else self._quote
            elif byte in b"\"'":
                self._quote = byte
            elif byte == 0x23:
                length = _block_length(buffer, at)
                if length is None:  # its header or its data has not all come
                    break
                at += length - 1
            at += 1
        self._scanned = at
        return None


def _block_length(buffer: bytearray, at: int) -> int | None:
    """Bytes of the block that starts at ``at``, header included; 1 if it is none of definite length; None:
    incomplete."""
    if at + 1 >= len(buffer):
        return None
    if not 0x31 <= buffer[at + 1] <= 0x39:
        return 1
    header = 2 + buffer[at + 1] - 0x30
    if len(buffer) < at + header:
        return None if bytes(buffer[at + 2 :]).isdigit() or len(buffer) == at + 2 else 1
    digits = bytes(buffer[at + 2 : at + header])
    if not digits.isdigit():
        return 1
    return header + int(digits) if len(buffer) >= at + header + int(digits) else None


@lru_cache(maxsize=1024)
def read_message(message: bytes) -> tuple[Unit | Faulty, ...]:
    """Units of one message, in order. An empty message has none."""
    if not message.strip(b" \t\r\0"):
        return ()
    return tuple(_read_unit(each) for each in _split(message, 0x3B))


def _read_unit(raw: bytes) -> Unit | Faulty:
    try:
        return _unit(raw.strip(_WHITE))
    except ScpiError as error:
        return Faulty(error.number, error.detail)


_WHITE = bytes(b for b in range(0x21) if b != 0x0A)
_HEADER = re.compile(rb"[^\x00-\x20]+")
_MNEMONIC = re.compile(rb"[A-Za-z][A-Za-z0-9_]*")


def _unit(raw: bytes) -> Unit:
    if not raw:
        raise ScpiError(-102, "empty message unit")
    found = _HEADER.match(raw)
    assert found is not None  # raw is stripped and not empty
    header, rest = found.group(), raw[found.end() :]
    if any(byte > 0x7E for byte in header):
        raise ScpiError(-101)
    query = header.endswith(b"?")
    header = header[:-1] if query else header
    if b"?" in header:
        raise ScpiError(-111, header.decode("ascii"))
    common, absolute = header.startswith(b"*"), header.startswith(b":")
    nodes = tuple(_mnemonic(each) for each in header[1 if common or absolute else 0 :].split(b":"))
    if common and len(nodes) > 1:
        raise ScpiError(-110, header.decode("ascii"))
    data = tuple(_datum(each.strip(_WHITE)) for each in _split(rest, 0x2C)) if rest.strip(_WHITE) else ()
    return Unit(nodes, query, common, absolute, data)


def _mnemonic(raw: bytes) -> str:
    if not raw:
        raise ScpiError(-102, "empty mnemonic")
    found = _MNEMONIC.match(raw)
    if not found:
        raise ScpiError(-101 if raw[0:1] not in b",\"'()#0123456789" else -110, raw.decode("ascii"))
    if found.end() != len(raw):
        after = raw[found.end() : found.end() + 1]
        raise ScpiError(-103 if after == b"," else -111 if after in b"\"'(#" else -101, raw.decode("ascii"))
    if len(raw.rstrip(b"0123456789")) > LONGEST_MNEMONIC:
        raise ScpiError(-112, raw.decode("ascii"))
    return raw.decode("ascii").upper()


_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+))(?:[ \t]*[eE][ \t]*([+-]?\d+))?[ \t]*(.*)", re.S)
_SUFFIX = re.compile(r"/?[A-Za-z]+(?:-?\d)?(?:[./][A-Za-z]+(?:-?\d)?)*")
_WORD = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
_BASES = {"H": (16, "0123456789ABCDEF"), "Q": (8, "01234567"), "B": (2, "01")}


def _datum(raw: bytes) -> Data:
    if not raw:
        raise ScpiError(-103, "empty parameter")
    first = raw[0:1]
    if first == b"#":
        return _hash(raw)
    if first in b"\"'":
        return _string(raw)
    if any(byte > 0x7E for byte in raw):
        raise ScpiError(-101)
    text = raw.decode("ascii")
    if first == b"(":
        if not text.endswith(")") or text.count("(") != text.count(")"):
            raise ScpiError(-171, text)
        return Expression(text[1:-1])
    if first.isalpha():
        if not _WORD.fullmatch(text):
            raise ScpiError(-141, text)
        if len(text) > LONGEST_MNEMONIC:
            raise ScpiError(-141, text)
        return Word(text.upper())
    if first in b"+-.0123456789":
        return _number(text)
    raise ScpiError(-102, text)


def _number(text: str) -> Number:
    found = _NUMBER.fullmatch(text)
    if not found:
        raise ScpiError(-121, text)
    mantissa, exponent, suffix = found.groups()
    if sum(c.isdigit() for c in mantissa) > LONGEST_MANTISSA:
        raise ScpiError(-124)
    if exponent is not None and abs(int(exponent)) > LARGEST_EXPONENT:
        raise ScpiError(-123, text)
    if suffix and not suffix[0].isalpha() and suffix[0] != "/":
        raise ScpiError(-121, text)
    if len(suffix) > LONGEST_SUFFIX:
        raise ScpiError(-134, suffix)
    if suffix and not _SUFFIX.fullmatch(suffix):
        raise ScpiError(-131, suffix)
    return Number(mantissa if exponent is None else f"{mantissa}E{exponent}", suffix.upper())


def _hash(raw: bytes) -> Data:
    kind = raw[1:2].decode("latin-1").upper()
    if kind in _BASES:
        base, digits = _BASES[kind]
        body = raw[2:].decode("latin-1").upper()
        if not body or any(c not in digits for c in body):
            raise ScpiError(-121, raw.decode("latin-1"))
        return Number(str(int(body, base)))
    if kind == "0":
        return Block(raw[2:])
    if not kind.isdigit():
        raise ScpiError(-161)
    count = int(kind)
    digits_sent = raw[2 : 2 + count]
    if len(digits_sent) != count or not digits_sent.isdigit():
        raise ScpiError(-161)
    data = raw[2 + count :]
    if len(data) != int(digits_sent):
        raise ScpiError(-161)
    return Block(data)


def _string(raw: bytes) -> Text:
    quote = raw[0:1]
    body = raw[1:-1]
    if len(raw) < 2 or raw[-1:] != quote or body.replace(quote * 2, b"").count(quote):
        raise ScpiError(-151)
    if any(byte > 0x7E for byte in body):
        raise ScpiError(-151)
    return Text(body.replace(quote * 2, quote).decode("ascii"))


def _split(raw: bytes, separator: int) -> list[bytes]:
    """Cut at ``separator``, but never inside quotes, parentheses or a block."""
    if b'"' not in raw and b"'" not in raw and b"(" not in raw and b"#" not in raw:
        return raw.split(bytes([separator]))
    pieces, start, at, depth, quote = [], 0, 0, 0, 0
    buffer = bytearray(raw)
    while at < len(raw):
        byte = raw[at]
        if quote:
            quote = 0 if byte == quote else quote
        elif byte in b"\"'":
            quote = byte
        elif byte == 0x23:
            if raw[at + 1 : at + 2] == b"0":  # indefinite length: to the end of the message
                break
            at += (_block_length(buffer, at) or 1) - 1
        elif byte == 0x28:
            depth += 1
        elif byte == 0x29:
            depth = max(0, depth - 1)
        elif byte == separator and not depth:
            pieces.append(raw[start:at])
            start = at + 1
        at += 1
    return [*pieces, raw[start:]]
