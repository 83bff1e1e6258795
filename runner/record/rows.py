"""What goes into the journal: one data class for each kind of row.

Numbers are SI, temperatures degC, times UTC seconds since 1970 (they become seconds from the start of the run
in the record). NaN in a scalar means "does not apply" or "not known". `checks.py` refuses what could not be
written later.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Kind = Literal["plan", "captures"]
Method = Literal["pulse", "bias", "remanence"]
NexusClass = Literal["NXsensor", "NXactuator", "NXenvironment"]
Level = Literal["info", "warning", "error"]

METHODS: dict[Method, int] = {"pulse": 1, "bias": 2, "remanence": 3}
DTYPES = ("int8", "int16", "int32", "float32", "float64")

Codes = NDArray[Any]


@dataclass(frozen=True, slots=True)
class PartRow:
    """One inductor under test; its number is its place in the header."""

    name: str
    description: str = ""
    channel: int = 1


@dataclass(frozen=True, slots=True)
class RunHeader:
    """What is known before the first leg. ``kind`` is "captures" for captures that were taken by hand."""

    run_id: str
    title: str
    kind: Kind
    start: float
    plan_name: str
    plan_bytes: bytes
    bench_name: str
    bench_bytes: bytes
    parts: tuple[PartRow, ...]
    leg_setpoints: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class CalibrationRow:
    """One constant of an instrument; ``uncertainty`` is one standard uncertainty in the same units."""

    value: float
    units: str
    uncertainty: float = 0.0
    date: str = ""
    certificate: str = ""


@dataclass(frozen=True, slots=True)
class InstrumentRow:
    """An instrument as it named itself; ``role`` becomes the name of its group in the record."""

    role: str
    nx_class: NexusClass
    name: str = ""
    vendor: str = ""
    model: str = ""
    serial: str = ""
    firmware: str = ""
    idn: str = ""
    address: str = ""
    calibration: Mapping[str, CalibrationRow] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class SettingRow:
    """How codes become numbers: volt = code * v_scale + v_offset, ampere = code * i_scale + i_offset.

    ``interval`` and ``first`` give the time axis [s from trigger]; ``detail`` is kept as JSON (put the
    smallest and largest code of the digitizer there as "code_min" and "code_max").
    """

    samples: int
    interval: float
    first: float
    dtype: str
    v_scale: float = 1.0
    v_offset: float = 0.0
    i_scale: float = 1.0
    i_offset: float = 0.0
    detail: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class CaptureRow:
    """One digitized pulse: codes as the instrument delivered them, both of shape [samples]."""

    repeat: int
    setting: int
    t: float
    voltage: Codes
    current: Codes


@dataclass(frozen=True, slots=True)
class PointRow:
    """One pulse width, bias current or remanence series, measured once. The journal adds the attempt and the session.

    Of a remanence series the captures are the shots in order, the first of them on the prepared core. Its polarity is the
    sign of ``peak_current`` (and of the captures); ``bias_current_setpoint`` and ``bias_current`` are those of its offset
    winding.
    """

    plan_index: int
    leg: int
    part: int
    method: Method
    start_time: float
    end_time: float
    quality: int = 0
    temperature_setpoint: float = math.nan
    body_temperature: float = math.nan
    air_temperature: float = math.nan
    pulse_width_setpoint: float = math.nan
    rail_voltage_setpoint: float = math.nan
    rail_voltage: float = math.nan
    rail_voltage_after: float = math.nan
    bias_current_setpoint: float = math.nan
    bias_current: float = math.nan
    peak_current: float = math.nan
    inductance: float = math.nan
    resistance: float = math.nan
    ac_resistance: float = math.nan
    test_frequency: float = math.nan


@dataclass(frozen=True, slots=True)
class EventRow:
    """Something that happened, in one sentence. ``point`` and ``leg`` are -1 when it belongs to none.

    An event handed to `Journal.add_point` belongs to that point and its leg.
    """

    t: float
    level: Level
    kind: str
    text: str
    point: int = -1
    leg: int = -1


def codes_dtype(name: str) -> np.dtype[Any]:
    """The little-endian dtype that the codes of a setting have on disk."""
    return np.dtype(name).newbyteorder("<")
