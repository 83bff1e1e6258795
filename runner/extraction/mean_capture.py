"""All repeats of one pulse become one mean waveform and a few numbers about their scatter.

Repeats of a width start from the same state and are digitized at the same instants, so their mean at each instant
is the waveform with less noise: everything after this works on one waveform a width, and memory and time no longer
depend on the number of repeats. What only a single capture can tell (a repeat unlike the others, hum, clipping) is
found here, before it is averaged away.
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from runner.arrays import BoolArray, FloatArray

Codes = NDArray[Any]  # integers as delivered, or floats
NOISE_SAMPLES = 16384  # on either side of the trigger, for the noise
ENOUGH = 8192  # samples that tell the level of a repeat
ODD_REPEAT = 8.0  # robust standard deviations from the other repeats
FEWEST_PRETRIGGER = 8
# No digitizer is better than about 20 bits; what is quieter comes from a simulator, and weights of a noise near zero would
# drown every other uncertainty of the fit.
QUIETEST = 1e-6  # of the largest value


@dataclass(frozen=True, slots=True)
class Setting:
    """How codes become volts and amperes: value = code·scale + offset; codes at or beyond the limits are cut off."""

    interval: float
    first: float
    v_scale: float = 1.0
    v_offset: float = 0.0
    i_scale: float = 1.0
    i_offset: float = 0.0
    code_min: float = -np.inf
    code_max: float = np.inf
    v_step: float = 0.0
    i_step: float = 0.0


@dataclass(frozen=True, slots=True)
class MeanCapture:
    """The mean of the good repeats of one point.

    ``voltage`` [n] V and ``current`` [n] A as read (channel offsets removed, nothing else), ``clean`` [n] False where
    either channel was cut off in any repeat. ``voltage_noise``, ``current_noise``: standard deviation of one sample of
    one repeat [V, A]. ``pretrigger``: samples behind each offset. ``offset_scatter``: how much the current offsets of
    the repeats differ, in units of what white noise explains. ``odd``: numbers of the repeats left out.
    ``voltage_top`` [V], ``current_top`` [A]: where the range ends. Steps: one code [V, A], 0 where unknown.
    """

    setting: Setting
    voltage: FloatArray
    current: FloatArray
    clean: BoolArray
    repeats: int
    voltage_noise: float
    current_noise: float
    pretrigger: int
    offset_scatter: float
    odd: tuple[int, ...]
    voltage_clipped: bool
    current_clipped: bool
    has_pulse: bool


def average(voltage: Codes, current: Codes, setting: Setting, *, guard: float = 0.0) -> MeanCapture:
    """Average the repeats of one point.

    Args:
        voltage, current: codes or floats [repeats, n] as delivered.
        setting: their scales and time axis.
        guard: time before the trigger that may already hold the pulse [s] (skew, jitter).

    Returns:
        The mean waveform; ``has_pulse`` is False when nothing stands out of the noise.
    """
    repeats, samples = voltage.shape
    setting = _with_steps(setting, voltage, current)
    v_low, v_high = _ends(voltage, setting)
    i_low, i_high = _ends(current, setting)
    before = _pretrigger(voltage, setting, guard)
    good = np.arange(repeats)
    odd: tuple[int, ...] = ()
    if repeats >= 4:
        odd = _odd_ones(voltage, current)
        good = np.setdiff1d(good, odd)
        if odd:
            voltage, current = voltage[good], current[good]
    r = len(good)
    v_mean, v_noise = _mean_and_noise(voltage, before)
    i_mean, i_noise = _mean_and_noise(current, before)
    clean = ~(_cut(voltage, setting) | _cut(current, setting))
    if before >= FEWEST_PRETRIGGER:
        offsets = current[:, :before].mean(axis=1)
        expected = i_noise / np.sqrt(before)
        scatter = float(offsets.std(ddof=1) / expected) if r > 1 and expected > 0 else 1.0
        v_zero, i_zero = float(v_mean[:before].mean()), float(i_mean[:before].mean())
    else:
        scatter = 1.0
        v_zero = -setting.v_offset / setting.v_scale
        i_zero = -setting.i_offset / setting.i_scale
    mean_v, mean_i = (v_mean - v_zero) * setting.v_scale, (i_mean - i_zero) * setting.i_scale
    noise_v = max(v_noise * abs(setting.v_scale), QUIETEST * float(np.abs(mean_v).max()))
    noise_i = max(i_noise * abs(setting.i_scale), QUIETEST * float(np.abs(mean_i).max()))
    has = bool(mean_v.max() > 8 * noise_v and mean_i.max() > 5 * noise_i) if samples > before else False
    return MeanCapture(
        setting, mean_v, mean_i, clean, r, noise_v, noise_i, before, scatter, odd,
        v_low or v_high, i_low or i_high, has,
    )  # fmt: skip


def _with_steps(setting: Setting, voltage: Codes, current: Codes) -> Setting:
    """The setting with the step of each channel's codes, found in the codes themselves where it was not said: what all
    their differences are multiples of (a 12-bit converter may deliver multiples of 16)."""
    v_step, i_step = setting.v_step, setting.i_step
    if v_step == 0.0 and voltage.dtype.kind in "iu":
        v_step = _code_step(voltage) * abs(setting.v_scale)
    if i_step == 0.0 and current.dtype.kind in "iu":
        i_step = _code_step(current) * abs(setting.i_scale)
    return replace(setting, v_step=v_step, i_step=i_step)


def _code_step(codes: Codes) -> int:
    some = codes[0, : 1 << 14].astype(np.int64)
    return int(np.gcd.reduce(np.abs(np.diff(some))))


def _ends(codes: Codes, setting: Setting) -> tuple[bool, bool]:
    if not np.isfinite(setting.code_max) and not np.isfinite(setting.code_min):
        return False, False
    return bool(codes.min() <= setting.code_min), bool(codes.max() >= setting.code_max)


def _cut(codes: Codes, setting: Setting) -> BoolArray:
    if not np.isfinite(setting.code_max) and not np.isfinite(setting.code_min):
        return np.zeros(codes.shape[1], dtype=bool)
    return np.asarray((codes.max(axis=0) >= setting.code_max) | (codes.min(axis=0) <= setting.code_min))


def _pretrigger(voltage: Codes, setting: Setting, guard: float) -> int:
    """Samples that surely lie before the pulse: before the trigger, and before the voltage leaves its start.

    Captures taken by hand may start their clock anywhere, so the trigger instant alone is not believed: when the
    voltage's rise lies elsewhere, what lies before it, less a twentieth, is taken.
    """
    samples = voltage.shape[1]
    first = voltage[0].astype(np.float64)
    high = float(first.max())
    low = float(np.median(first[: max(3, samples // 50)]))
    rise = int(np.argmax(first > low + 0.5 * (high - low))) if high > low else 0
    from_trigger = int(np.floor((-guard - setting.first) / setting.interval)) - 1
    from_rise = rise - max(2, rise // 20) - int(np.ceil(guard / setting.interval))
    return max(0, min(from_trigger, from_rise) if FEWEST_PRETRIGGER <= from_trigger <= rise else from_rise)


def _odd_ones(voltage: Codes, current: Codes) -> tuple[int, ...]:
    """Repeats whose mean voltage or current lies far from the others' (a missed pulse, a spike in the mains)."""
    odd: set[int] = set()
    for codes in (voltage, current):
        level = codes[:, :: max(1, codes.shape[1] // ENOUGH)].mean(axis=1, dtype=np.float64)
        middle = float(np.median(level))
        spread = 1.4826 * float(np.median(np.abs(level - middle)))
        floor = 1e-3 * abs(float(codes.max()) - float(codes.min())) / 2
        odd |= set(np.flatnonzero(np.abs(level - middle) > ODD_REPEAT * max(spread, floor)).tolist())
    return tuple(sorted(odd)) if len(odd) <= len(voltage) // 2 else ()


def _mean_and_noise(codes: Codes, before: int) -> tuple[FloatArray, float]:
    """Mean over the repeats [n], and the standard deviation of a single sample, in codes.

    With repeats: their pooled scatter about the mean, slow differences between repeats (offset, sag, drift) taken
    out by differencing neighbours, since those are no white noise. Alone: second differences of the waveform.
    """
    repeats, samples = codes.shape
    # Half of what is looked at lies before the trigger, half in the pulse; more would not make it better known.
    begin, stop = max(0, before - NOISE_SAMPLES), min(samples, max(before, 4096) + NOISE_SAMPLES)
    if repeats == 1:
        mean = codes[0].astype(np.float64)
        return mean, float(np.sqrt(_typical(np.diff(mean[begin:stop], 2) ** 2) / 6.0))
    mean = codes[0].astype(np.float64)
    for row in codes[1:]:  # twice as fast as a mean over the first axis, which converts piece by piece
        mean += row
    mean /= repeats
    steps = np.diff(codes[:, begin:stop].astype(np.float64), axis=1)
    steps -= steps.mean(axis=0)
    return mean, float(np.sqrt(_typical((steps**2).mean(axis=0)) * repeats / (repeats - 1) / 2.0))


def _typical(squares: FloatArray) -> float:
    """Median over stretches of the mean within each: the few stretches at the pulse's edges do not move it."""
    stretches = np.array_split(squares, min(25, max(1, len(squares) // 16)))
    return float(np.median([stretch.mean() for stretch in stretches]))
