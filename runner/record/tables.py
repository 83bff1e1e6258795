"""What an extraction hands to the record: surfaces L(I,T) and curves Isat(T), as plain arrays.

``errors`` is one standard uncertainty (k = 1) of the array beside it. NaN is "not measured" or "not reached".
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from runner.arrays import FloatArray, IntArray
from runner.record.rows import Method


@dataclass(frozen=True, slots=True)
class SurfaceTable:
    """L(I,T) of one part by one method; m temperatures, n currents.

    ``temperature_degC`` [m] is the axis, ``current`` [n] A, ``inductance`` and ``errors`` [m, n] H,
    ``point_count`` [m, n] how many points stand behind each value, ``body_temperature`` [m] degC as measured.
    """

    part: int
    method: Method
    temperature_degC: FloatArray
    current: FloatArray
    inductance: FloatArray
    errors: FloatArray
    point_count: IntArray
    body_temperature: FloatArray


@dataclass(frozen=True, slots=True)
class IsatTable:
    """Isat(T) of one part by one method; k drops, m temperatures; ``ampere`` and ``errors`` are [k, m] A."""

    part: int
    method: Method
    drops: tuple[float, ...]
    temperature_degC: FloatArray
    ampere: FloatArray
    errors: FloatArray


@dataclass(frozen=True, slots=True)
class ExtractionTables:
    """One extraction: who made it, when (ISO 8601), with which settings, and what came out."""

    program: str
    version: str
    date: str
    settings: Mapping[str, Any]
    surfaces: tuple[SurfaceTable, ...]
    isats: tuple[IsatTable, ...]
