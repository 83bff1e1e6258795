"""A quick look at a pulse, for decisions between two pulses: peak, flux linkage, slope at the end, how fast it steepens.

Not the extraction: no skew, no shunt inductance, no uncertainty. What matters here is that nothing is underestimated, so
the larger of two readings of a slope is taken. All repeats are averaged first; the peak is the largest of any repeat.
"""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray

_ON = 0.5  # of the largest voltage: the switch is on
_FEWEST = 12  # samples of a pulse, below which slopes are not looked at
_LAST, _BEFORE = 0.85, 0.65  # of the end current: where the last window of it begins, and the one before
_START = 0.3  # of the end current: up to here is the start of the pulse
_STEEPEST_SEEN = 40.0  # exponents beyond this are noise


@dataclass(frozen=True, slots=True)
class Look:
    """What one point's pulses looked like; SI.

    Attributes:
        width: of the pulse that was asked for.
        peak: largest current of any repeat.
        end_current: current at the end of the pulse, from the mean of the repeats.
        start_current: current before the pulse (mean before the trigger), still in `peak` and `end_current`.
        flux_linkage: integral of the part's voltage less the winding's drop.
        charge: integral of the current.
        energy: taken from the bank, at most (rail voltage times charge).
        drive: voltage at the start of the pulse, the largest there is.
        end_drive: voltage at the end.
        start_slope: di/dflux at the start of the pulse, 1/H.
        end_slope: the same at its end.
        growth: exponent of that slope over the current near the end: slope ~ current ** growth.
    """

    width: float
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
    growth: float

    @property
    def inductance(self) -> float:
        """Differential inductance at the end of the pulse [H]."""
        return 1 / self.end_slope if self.end_slope > 0 else float("nan")

    @property
    def fallen(self) -> float:
        """By which fraction the differential inductance fell during this pulse."""
        return 1 - self.start_slope / self.end_slope if self.end_slope > 0 else float("nan")


def look_at(
    voltage: FloatArray,
    current: FloatArray,
    *,
    interval: float,
    pretrigger: int,
    width: float,
    rail: float,
    resistance: float,
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

    Returns:
        The look, or None where no pulse is to be seen (the switch did not turn on, or too few samples).
    """
    mean_voltage, mean_current = voltage.mean(axis=0), current.mean(axis=0)
    before = max(pretrigger // 2, 1)
    start_voltage, start_current = float(mean_voltage[:before].mean()), float(mean_current[:before].mean())
    drive = mean_voltage - start_voltage
    top = float(drive.max())
    on = np.flatnonzero(drive > _ON * top)
    if top <= 0 or on.size < _FEWEST:
        return None
    pulse = slice(int(on[0]), int(on[-1]) + 1)
    flux_rate = drive[pulse] - resistance * (mean_current[pulse] - start_current)
    flux = np.cumsum(flux_rate) * interval
    through = mean_current[pulse] - start_current
    slopes = _slopes(flux, through)
    if slopes is None:
        return None
    start_slope, end_slope, growth = slopes
    count = flux.size
    charge = float(through.sum() * interval)
    return Look(
        width=width,
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
        growth=growth,
    )


def _slopes(flux: FloatArray, current: FloatArray) -> tuple[float, float, float] | None:
    """Slope of current over flux linkage at the start and at the end, and its exponent over current near the end.

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
    return max(start.slope, 0.0), max(float(end_slope), 0.0), growth


@dataclass(frozen=True, slots=True)
class _Line:
    """Least squares through a window: slope of current over flux linkage [1/H], and the mean current in it [A]."""

    slope: float
    current: float


def _line(flux: FloatArray, current: FloatArray, first: int, stop: int) -> _Line:
    x, y = flux[first:stop], current[first:stop]
    centred = x - x.mean()
    weight = float(centred @ centred)
    return _Line(float(centred @ y) / weight if weight > 0 else 0.0, float(y.mean()))
