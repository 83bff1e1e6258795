"""Captures of a remanence series as the pulse method sees its own: all in one direction, first and later shots apart."""

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from runner.extraction.mean_capture import Setting

Codes = NDArray[Any]
Shots = tuple[Codes, Codes, Setting]


def turned(voltage: Codes, current: Codes, setting: Setting, sign: int) -> Shots:
    """Codes [shots, n] of both channels and their setting for a pulse of this polarity, so that values come out positive.

    Codes are negated, and with them what they are offset by and where they are cut off.
    """
    if sign > 0:
        return voltage, current, setting
    wide = np.int64 if voltage.dtype.kind in "iu" else np.float64  # int16 has no -(-32768)
    return (
        -voltage.astype(wide),
        -current.astype(wide),
        replace(
            setting,
            v_offset=-setting.v_offset,
            i_offset=-setting.i_offset,
            code_min=-setting.code_max,
            code_max=-setting.code_min,
        ),
    )


def first_of(shots: Shots) -> Shots:
    """The first shot alone."""
    voltage, current, setting = shots
    return voltage[:1], current[:1], setting


def conditioned_of(shots: Shots) -> Shots:
    """The later half of the shots: a core that remembers is magnetised by then."""
    voltage, current, setting = shots
    half = max(len(voltage) // 2, 1)
    return voltage[half:], current[half:], setting
