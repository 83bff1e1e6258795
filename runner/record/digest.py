"""``raw_sha256``: one number for everything that was measured, from the journal and from the record alike.

SHA-256 over the points in order; for each: the integer columns and the number of captures as i8, the two
times and the scalars as f8 (little-endian, times relative to the start of the run as the record stores them),
then voltage and current codes of each capture in the order of ``repeat``. Settings, events and extractions
are not in it.
"""

import hashlib
from collections.abc import Iterable, Iterator
from typing import Any

import numpy as np

from runner.arrays import FloatArray
from runner.record.columns import INTEGERS, SCALARS, TIMES
from runner.record.reading import Columns


class RawDigest:
    """Fed with the points in order and, after each, its captures in order."""

    def __init__(self) -> None:
        self._hash = hashlib.sha256()

    def point(self, integers: Iterable[int], captures: int, floats: FloatArray) -> None:
        self._hash.update(np.array([*integers, captures], dtype="<i8").tobytes())
        self._hash.update(np.asarray(floats, dtype="<f8").tobytes())

    def capture(self, voltage: bytes, current: bytes) -> None:
        self._hash.update(voltage)
        self._hash.update(current)

    def hexdigest(self) -> str:
        return self._hash.hexdigest()


def rows_to_hash(points: Columns) -> Iterator[tuple[list[int], FloatArray]]:
    """For each point its integers and its floats; ``points`` has relative times."""
    integers = np.column_stack([np.asarray(points[name], dtype=np.int64) for name in INTEGERS])
    floats = np.column_stack([np.asarray(points[name], dtype=np.float64) for name in (*TIMES, *SCALARS)])
    # One bit pattern for "does not apply", whichever NaN came in: the journal keeps it as NULL.
    floats = np.where(np.isnan(floats), np.nan, floats)
    for row in range(len(integers)):
        yield integers[row].tolist(), floats[row]


def relative(times: Any, start: float) -> FloatArray:
    """UTC seconds to seconds from the start of the run: the one place where this subtraction is made."""
    return np.asarray(times, dtype=np.float64) - start
