"""Samples on the wire: IEEE 488.2 blocks and ASCII lists, to and from arrays. Pure; reading is a callable.

A definite block is `#`, one digit that says how many digits follow, those digits that say how many bytes
follow, and the bytes: `#15hallo` (IEEE 488.2-1992, 7.7.6). `#0` opens a block of unknown length that ends
with the message; its bytes may contain the terminator, so on a plain socket it can be read only by who knows
how many bytes to expect.
"""

from collections.abc import Callable
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Samples = NDArray[np.int16] | NDArray[np.int32] | NDArray[np.float32] | NDArray[np.float64]
Encoding = Literal["int16", "int32", "real32", "ascii"]
Order = Literal["big", "little"]


class NotABlock(ValueError):
    """Something else came where a block was due.

    Attributes:
        began: the bytes that were taken before that was clear.
    """

    def __init__(self, what: str, began: bytes) -> None:
        super().__init__(what)
        self.began = began


_TYPES = {"int16": "i2", "int32": "i4", "real32": "f4"}


def take_block(read: Callable[[int], bytes], expected_bytes: int | None = None) -> bytes:
    """The data of the block that comes next.

    Args:
        read: gives exactly so many bytes, or raises.
        expected_bytes: how long a block of indefinite length will be.

    Raises:
        NotABlock: something else comes.
    """
    head = read(2)
    if head[:1] != b"#" or not head[1:].isdigit():
        raise NotABlock(f"a block begins with '#' and a digit, this begins with {head!r}", head)
    digits = int(head[1:])
    if digits == 0:
        if expected_bytes is None:
            raise NotABlock("a block of indefinite length ('#0') and nothing says how long it is", head)
        return read(expected_bytes)
    count = read(digits)
    if not count.isdigit():
        raise NotABlock(f"a block's length is made of digits, this is {count!r}", head + count)
    return read(int(count))


def decode_samples(data: bytes, encoding: Encoding, order: Order) -> Samples:
    """Samples of a block, or of an ASCII list, in the machine's own byte order.

    Raises:
        ValueError: the bytes are no whole number of samples, or an item of the list is no number.
    """
    if encoding == "ascii":
        return np.array([float(item) for item in data.split(b",")], dtype=np.float64)
    kind = np.dtype(_TYPES[encoding])
    if len(data) % kind.itemsize:
        raise ValueError(f"{len(data)} bytes are no whole number of {encoding} samples")
    wire = np.frombuffer(data, dtype=kind.newbyteorder(">" if order == "big" else "<"))
    return wire.astype(kind)


def bytes_per_sample(encoding: Encoding) -> int | None:
    """Width of a sample on the wire; None for text."""
    return None if encoding == "ascii" else np.dtype(_TYPES[encoding]).itemsize
