"""A quick look at a pulse, for decisions between two pulses: peak, flux linkage, slope at the end, how fast it steepens.

Not the extraction: no fits over several pulses, no uncertainty budget. What matters here is that nothing is
underestimated. The two errors of the fixture that would do that are undone: the shunt's series inductance, which shows a
steeply rising current that is not there yet, and the skew between the channels, which looks for the end of the pulse where
the current has begun to fall. All repeats are averaged first; the peak is the largest of any repeat.
"""

from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from runner.arrays import FloatArray

_ON = 0.5  # of the largest voltage: the switch is on
_EDGE = 2  # samples of the falling edge
_FEWEST = 12  # samples of a pulse, below which slopes are not looked at
_LAST, _BEFORE = 0.85, 0.65  # of the end current: where the last window of it begins, and the one before
_START = 0.3  # of the end current: up to here is the start of the pulse
_SHORTER, _LATE = 0.03, 60e-9  # of the width, and s: a pulse shorter than asked for by both was cut
_STEEPEST_SEEN = 40.0  # exponents beyond this are noise


@dataclass(frozen=True, slots=True)
class Look:
    """What one point's pulses looked like; SI.

    Attributes:
        width: of the pulse that was asked for; on_time: how long the switch was seen on.
        peak: largest current of any repeat.
        end_current: current at the end of the pulse, from the mean of the repeats.
        start_current: current before the pulse (mean before the trigger), still in `peak` and `end_current`.
        flux_linkage: integral of the part's voltage less the winding's drop.
        charge: integral of the current.
        energy: taken from the bank, at most (rail voltage times charge).
        drive: voltage at the start of the pulse, the largest there is.
        end_drive: voltage at the end.
        start_slope: di/dflux at the start of the pulse, 1/H.
        end_slope: the same at its end; slope_error: its standard error from the scatter of the samples.
        growth: exponent of that slope over the current near the end: slope ~ current ** growth.
    """

    width: float
    on_time: float
    peak: float
    end_current: float
    start_current: float
    flux_linkage: float
    charge: float
    energy: float
    drive: float
    end_drive: float
    start_slope: float
    end_slope: float
    slope_error: float
    growth: float

    @property
    def is_cut_short(self) -> bool:
        """The switch was off before its time: the fixture ended the pulse by itself."""
        return self.on_time < min((1 - _SHORTER) * self.width, self.width - _LATE)

    @property
    def secant_slope(self) -> float:
        """Current over flux linkage of the whole pulse, 1/L_s [1/H]; the noise has no hold on it."""
        return max(self.end_current, 0.0) / self.flux_linkage

    @property
    def inductance(self) -> float:
        """Differential inductance at the end of the pulse [H]."""
        return 1 / self.end_slope if self.end_slope > 0 else float("nan")


def look_at(
    voltage: FloatArray,
    current: FloatArray,
    *,
    interval: float,
    pretrigger: int,
    width: float,
    rail: float,
    resistance: float,
    shunt_time_constant: float = 0.0,
    skew: float = 0.0,
) -> Look | None:
    """Look at the captures of one point.

    Args:
        voltage: across the part [repeats, n] [V].
        current: through it [repeats, n] [A].
        interval: between samples [s].
        pretrigger: samples before the trigger.
        width: that was asked for [s].
        rail: voltage of the bank [V].
        resistance: of the winding, about [ohm].
        shunt_time_constant: series inductance of the shunt over its resistance [s].
        skew: how much later the voltage channel is than the current channel [s].

    Returns:
        The look, or None where no pulse is to be seen (the switch did not turn on, or too few samples).
    """
    current = _without_inductance(current, shunt_time_constant / interval, max(pretrigger // 2, 1))
    mean_voltage, mean_current = _earlier(voltage.mean(axis=0), skew / interval), current.mean(axis=0)
    before = max(pretrigger // 2, 1)
    start_voltage, start_current = float(mean_voltage[:before].mean()), float(mean_current[:before].mean())
    drive = mean_voltage - start_voltage
    top = float(drive.max())
    on = np.flatnonzero(drive > _ON * top)
    if top <= 0 or on.size < _FEWEST + _EDGE:
        return None
    pulse = slice(int(on[0]), int(on[-1]) + 1 - _EDGE)
    flux_rate = drive[pulse] - resistance * (mean_current[pulse] - start_current)
    flux = np.cumsum(flux_rate) * interval
    through = mean_current[pulse] - start_current
    slopes = _slopes(flux, through)
    if slopes is None:
        return None
    start_slope, end_slope, slope_error, growth = slopes
    count = flux.size
    charge = float(through.sum() * interval)
    return Look(
        width=width,
        on_time=float(on[-1] - on[0] + 1) * interval,
        peak=float(current.max()) - start_current,
        end_current=float(through[-max(count // 50, 1) :].mean()),
        start_current=start_current,
        flux_linkage=float(flux[-1]),
        charge=charge,
        energy=max(rail, float(drive.max())) * charge,
        drive=float(np.median(drive[pulse][: max(count // 10, 3)])),
        end_drive=float(np.median(drive[pulse][-max(count // 10, 3) :])),
        start_slope=start_slope,
        end_slope=end_slope,
        slope_error=slope_error,
        growth=growth,
    )


def _without_inductance(current: FloatArray, samples: float, before: int) -> FloatArray:
    """Current from what a shunt with series inductance shows: a low-pass of L/R undoes i + (L/R) di/dt."""
    if samples <= 0:
        return current
    keep = float(np.exp(-1 / samples))
    start = current[..., :before].mean(axis=-1, keepdims=True)
    return np.asarray(lfilter([1 - keep], [1, -keep], current - start, axis=-1) + start, dtype=float)


def _earlier(values: FloatArray, samples: float) -> FloatArray:
    """The same values so many samples earlier, to the nearest; the last one fills up."""
    shift = round(samples)
    if shift == 0:
        return values
    return np.asarray(values[np.clip(np.arange(values.size) + shift, 0, values.size - 1)])


def _slopes(flux: FloatArray, current: FloatArray) -> tuple[float, float, float, float] | None:
    """Slope of current over flux linkage at the start and at the end, its error there, its exponent over current.

    The end is looked at in two windows of the current, the last one from `_LAST` of its end value: past a knee these are
    short in time, and the slope of a longer one would be that of the knee and not of its far side.
    """
    count = flux.size
    width = max(count // 60, 1)
    sums = np.concatenate([[0.0], np.cumsum(current)])
    smooth = np.maximum.accumulate((sums[width:] - sums[:-width]) / width)
    end = float(smooth[-1])
    if not (end > 0 and flux[-1] > 0):
        return None
    last_from = min(int(np.searchsorted(smooth, _LAST * end)), count - _FEWEST)
    before_from = min(int(np.searchsorted(smooth, _BEFORE * end)), last_from - _FEWEST)
    start_to = max(int(np.searchsorted(smooth, _START * end)), _FEWEST)
    if before_from < 0:
        return None
    start = _line(flux, current, 0, start_to)
    before = _line(flux, current, before_from, last_from)
    last = _line(flux, current, last_from, count)
    growth = 0.0
    if 0 < before.slope < last.slope and 0 < before.current < last.current:
        growth = float(np.log(last.slope / before.slope) / np.log(last.current / before.current))
    growth = min(growth, _STEEPEST_SEEN)
    # The slope found is that of the middle of the last window; carry it to the end.
    end_slope = last.slope * (end / last.current) ** growth if last.current > 0 else last.slope
    return max(start.slope, 0.0), max(float(end_slope), 0.0), last.error, growth


@dataclass(frozen=True, slots=True)
class _Line:
    """Least squares through a window: slope of current over flux linkage, its error [1/H], the mean current there [A]."""

    slope: float
    error: float
    current: float


def _line(flux: FloatArray, current: FloatArray, first: int, stop: int) -> _Line:
    x, y = flux[first:stop], current[first:stop]
    centred = x - x.mean()
    weight = float(centred @ centred)
    if weight <= 0:
        return _Line(0.0, float("inf"), float(y.mean()))
    slope = float(centred @ y) / weight
    misfit = y - y.mean() - slope * centred
    return _Line(slope, (float(misfit @ misfit) / max(x.size - 2, 1) / weight) ** 0.5, float(y.mean()))
