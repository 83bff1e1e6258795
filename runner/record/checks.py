"""What the journal refuses: every row that a later rebuild of the record could not write.

A night's points must not wait for the morning to be found unwritable. All of this is a fault of the caller,
so it is a ValueError that names the row and the value.
"""

import math
import re
from collections.abc import Sequence

import numpy as np

from runner.record.flags import EVERY_FLAG
from runner.record.rows import (
    DTYPES,
    METHODS,
    CaptureRow,
    EventRow,
    InstrumentRow,
    PointRow,
    RunHeader,
    SettingRow,
)

_LARGEST_CAPTURE = 900_000_000  # bytes: SQLite keeps a row, both channels together, below 1e9 by default
_NAME = re.compile(r"[a-z][a-z0-9_]*")


def check_text(where: str, text: str) -> None:
    """HDF5 ends a text at NUL, and cannot hold half a surrogate pair."""
    if "\0" in text:
        raise ValueError(f"{where}: text with a NUL character {text!r}")
    try:
        text.encode()
    except UnicodeEncodeError:
        raise ValueError(f"{where}: text that is not valid Unicode {text!r}") from None


def check_finite(where: str, value: float) -> None:
    if not math.isfinite(value):
        raise ValueError(f"{where}: must be a finite number, got {value!r}")


def check_header(header: RunHeader) -> None:
    for name in ("run_id", "title", "plan_name", "bench_name"):
        check_text(f"run.{name}", getattr(header, name))
    if header.kind not in ("plan", "captures"):
        raise ValueError(f"run.kind: 'plan' or 'captures', got {header.kind!r}")
    check_finite("run.start", header.start)
    if not header.parts:
        raise ValueError("run.parts: a run has at least one part")
    for number, part in enumerate(header.parts):
        check_text(f"part {number} name", part.name)
        check_text(f"part {number} description", part.description)


def check_instrument(row: InstrumentRow) -> None:
    if not _NAME.fullmatch(row.role):
        raise ValueError(f"instrument role: lower case letters, digits and _, got {row.role!r}")
    if row.nx_class not in ("NXsensor", "NXactuator", "NXenvironment"):
        raise ValueError(f"instrument {row.role}: unknown NeXus class {row.nx_class!r}")
    if (row.role == "chamber") != (row.nx_class == "NXenvironment"):
        raise ValueError(f"instrument {row.role}: the chamber, and nothing else, is an NXenvironment")
    for name in ("name", "vendor", "model", "serial", "firmware", "idn", "address"):
        check_text(f"instrument {row.role} {name}", getattr(row, name))
    for name, constant in row.calibration.items():
        where = f"instrument {row.role} calibration {name}"
        if not _NAME.fullmatch(name):
            raise ValueError(f"{where}: a name has lower case letters, digits and _")
        check_finite(where, constant.value)
        check_finite(where, constant.uncertainty)
        for text in (constant.units, constant.date, constant.certificate):
            check_text(where, text)


def check_setting(row: SettingRow) -> None:
    if row.dtype not in DTYPES:
        raise ValueError(f"setting.dtype: one of {', '.join(DTYPES)}, got {row.dtype!r}")
    most = _LARGEST_CAPTURE // (2 * np.dtype(row.dtype).itemsize)
    if not 1 <= row.samples <= most:
        raise ValueError(f"setting.samples: 1 to {most} of {row.dtype}, got {row.samples!r}")
    for name in ("interval", "first", "v_scale", "v_offset", "i_scale", "i_offset"):
        check_finite(f"setting.{name}", getattr(row, name))
    if not row.interval > 0:
        raise ValueError(f"setting.interval: must be positive, got {row.interval!r} s")
    if row.v_scale == 0 or row.i_scale == 0:
        raise ValueError("setting: a scale of zero makes every code the same")


def check_point(row: PointRow, *, parts: int, legs: int) -> None:
    if row.method not in METHODS:
        raise ValueError(f"point.method: 'pulse' or 'bias', got {row.method!r}")
    for name, limit in (("plan_index", 2**31), ("leg", legs), ("part", parts)):
        if not 0 <= getattr(row, name) < limit:
            raise ValueError(f"point.{name}: 0 to {limit - 1}, got {getattr(row, name)!r}")
    if row.quality & ~int(EVERY_FLAG) or row.quality < 0:
        raise ValueError(f"point.quality: bits that flags.py does not know, got {row.quality!r}")
    check_finite("point.start_time", row.start_time)
    check_finite("point.end_time", row.end_time)


def check_captures(captures: Sequence[CaptureRow], setting: SettingRow | None) -> None:
    """All captures of a point share one setting, have its dtype and length, and differ in ``repeat``."""
    if not captures:
        return
    if setting is None:
        raise ValueError(f"capture.setting: {captures[0].setting!r} is not a setting of this run")
    seen: set[int] = set()
    for capture in captures:
        where = f"capture, repeat {capture.repeat!r}"
        if capture.setting != captures[0].setting:
            raise ValueError(f"{where}: all captures of a point share one digitizer setting")
        if capture.repeat in seen or not 0 <= capture.repeat < 2**31:
            raise ValueError(f"{where}: repeats count from 0 and come once each")
        seen.add(capture.repeat)
        check_finite(f"{where}, t", capture.t)
        for name, codes in (("voltage", capture.voltage), ("current", capture.current)):
            if codes.shape != (setting.samples,):
                raise ValueError(f"{where}: {name} has shape {codes.shape}, not ({setting.samples},)")
            if codes.dtype.newbyteorder("=") != np.dtype(setting.dtype):
                raise ValueError(f"{where}: {name} is {codes.dtype}, the setting says {setting.dtype}")
            if codes.dtype.kind == "f" and not np.isfinite(codes).all():
                raise ValueError(f"{where}: {name} has a value that is not a number")


def check_event(row: EventRow) -> None:
    check_finite("event.t", row.t)
    if row.level not in ("info", "warning", "error"):
        raise ValueError(f"event.level: info, warning or error, got {row.level!r}")
    check_text("event.kind", row.kind)
    check_text("event.text", row.text)
