"""May the next pulse be fired? Worst current and energy of a wider pulse, from the last one's capture.

A wider pulse adds flux linkage dλ = v dt, at most the voltage at the start of the last pulse times the added time, and
current by the slope di/dλ = 1/L_d. At the end of the last capture that slope is known; beyond it the inductance may
fall. Over current it falls like a power: L_d ~ i**-(p+1) past the knee of a part that saturates as
λ ~ i / (1 + i**p)**(1/p), and sharply gapped ferrite has p of 6 to 10. So the worst case lets the slope grow from its
measured value as i**STEEPEST (or half as steep again as the capture itself bends, if that is more), up to that of a part
with hardly any core left; then the current has no end but the limit, which is as it should be.

No step may use more than HEADROOM of what is left to the limit: the bound may be wrong by its own size and the limit still
holds. Where a step asked for is not safe, a shorter one may be: the climb then fires scouting pulses in between, each of
which tells more. A plan with few widths is thus climbed as carefully as one with many.
"""

import math
from dataclasses import dataclass

from runner.sweep.look import Look

STEEPEST = 14.0
_BEND_FACTOR = 1.5  # on the exponent seen, for noise and for knees that are still turning
_LEFT = 0.02  # of the initial inductance, left when the core is saturated (without its core a winding has 2 to 6 %)
_SLOPE_FACTOR = 1.05  # on the measured slope, for noise and calibration ...
_SLOPE_ERRORS = 3.0  # ... and for the scatter of the samples in small or short pulses ...
_CARRIED = (
    1.08  # ... and from the middle of the last window of current to its end, by half the exponent again
)
HEADROOM = 0.5
_MARGIN = 0.97  # of a limit may be predicted; the rest is for the current's own calibration
_FIRST_LEFT = 0.02  # of the nominal inductance, assumed for a part nobody has pulsed yet
_SMALLEST_GAIN = 1.005  # a scouting pulse must be at least this much wider than the last, or the climb ends
_BISECTIONS = 40
_FAR = 300.0  # more than this many e-foldings of current are not looked at


@dataclass(frozen=True, slots=True)
class PulseLimits:
    """What a pulse on this part must not pass [A, J, W]; None where the plan does not limit it."""

    current: float
    energy: float
    mean_power: float | None = None


@dataclass(frozen=True, slots=True)
class Prediction:
    """Of a pulse not fired yet: what is likely, and the worst that the last capture allows [A, J]."""

    current: float
    worst_current: float
    energy: float
    worst_energy: float


@dataclass(frozen=True, slots=True)
class Step:
    """Fire this width next."""

    width: float
    prediction: Prediction | None


@dataclass(frozen=True, slots=True)
class Halt:
    """The climb ends here, and why."""

    why: str


def predict(last: Look, width: float) -> Prediction:
    """Current and energy of a pulse of `width` [s] after one that looked like `last`.

    Returns:
        Prediction in A and J; for a width not above the last one, what was seen.
    """
    added = max(width - last.width, 0.0)
    flux = last.drive * added
    bend = max(last.growth, 0.0)
    # A slope that the noise has hidden is at least that of the whole pulse.
    worst_slope = max(last.end_slope + _SLOPE_ERRORS * last.slope_error, last.secant_slope)
    ceiling = max(max(last.start_slope, last.secant_slope) / _LEFT, worst_slope)
    steepest = max(STEEPEST, _BEND_FACTOR * bend)
    likely = last.peak + _rise(last.peak, last.end_slope, min(bend, STEEPEST), flux, ceiling)
    slope = min(_SLOPE_FACTOR * worst_slope * _CARRIED ** (0.5 * bend), ceiling)
    worst = last.peak + _rise(last.peak, slope, steepest, flux, ceiling)
    supply = last.energy / last.charge if last.charge > 0 else last.drive
    energy = last.energy + supply * added * (last.peak + likely) / 2
    # Current only rises during a pulse, so its end value times the time bounds the charge.
    worst_energy = last.energy + supply * added * worst
    return Prediction(likely, worst, energy, worst_energy)


def first_step(
    target: float, *, limits: PulseLimits, nominal_inductance: float, drive: float, shortest: float
) -> Step | Halt:
    """First pulse on a part: safe even if hardly any of its nominal inductance is there.

    Args:
        target: width the plan asks for first [s].
        limits: of this part.
        nominal_inductance: from the plan [H].
        drive: rail voltage [V].
        shortest: the shortest pulse that this bench can show [s].

    Returns:
        A step of at most `target`, or a halt if even the shortest could pass a limit.
    """
    slope = drive / (_FIRST_LEFT * nominal_inductance)  # A/s
    by_current = _MARGIN * limits.current / slope
    by_energy = (
        _MARGIN * limits.energy / (drive * slope)
    ) ** 0.5  # all of drive * slope * t * t, not half of it
    width = min(target, by_current, by_energy)
    if width < shortest:
        # A part's own inductance may be trusted down to a tenth where the bench cannot show anything shorter.
        if shortest * drive / (0.1 * nominal_inductance) > _MARGIN * limits.current:
            return Halt(f"even a pulse of {shortest * 1e6:.3g} us could pass {limits.current:g} A")
        width = min(target, shortest)
    return Step(width, None)


def next_step(last: Look, target: float, limits: PulseLimits, *, period: float = float("inf")) -> Step | Halt:
    """Widest safe pulse up to the one asked for.

    Args:
        last: the widest pulse so far.
        target: width asked for next, not below `last.width` [s].
        limits: of this part.
        period: time between pulses, for the mean power [s].

    Returns:
        `Step` to `target`, or to a shorter scouting width; `Halt` where no step worth firing is safe.
    """
    prediction = predict(last, target)
    broken = _broken(last, prediction, limits, period)
    if broken is None:
        return Step(target, prediction)
    low, high = last.width, target
    for _ in range(_BISECTIONS):
        middle = (low + high) / 2
        low, high = (
            (middle, high) if _broken(last, predict(last, middle), limits, period) is None else (low, middle)
        )
    if low < _SMALLEST_GAIN * last.width:
        return Halt(f"{target * 1e6:.4g} us is not fired: {broken}")
    return Step(low, predict(last, low))


def _broken(last: Look, prediction: Prediction, limits: PulseLimits, period: float) -> str | None:
    left = _MARGIN * limits.current - last.peak
    if prediction.worst_current > last.peak + HEADROOM * left:
        return f"current could reach {prediction.worst_current:.3g} A, limit {limits.current:g} A"
    if prediction.worst_energy > _MARGIN * limits.energy:
        return f"pulse energy could reach {prediction.worst_energy * 1e3:.3g} mJ, limit {limits.energy * 1e3:g} mJ"
    if limits.mean_power is not None and prediction.worst_energy / period > limits.mean_power:
        return (
            f"mean power could reach {prediction.worst_energy / period:.3g} W, limit {limits.mean_power:g} W"
        )
    return None


def _rise(current: float, slope: float, growth: float, flux: float, ceiling: float) -> float:
    """How far the current rises over `flux` [Wb], where its slope over flux grows as current**growth up to a ceiling [A].

    di/dλ = s (i/i0)**m has the solution i = i0 (1 - (m-1) s λ / i0)**(-1/(m-1)), and the exponential for m = 1.
    """
    if flux <= 0 or slope <= 0 or current <= 0:
        return ceiling * max(flux, 0.0)
    unit = slope * flux / current  # the rise with the slope as it is, relative to the current
    log_ceiling = math.log(ceiling / slope)
    # The current, relative to now, at which the slope is at its ceiling; beyond e**_FAR it is out of any reach.
    top = math.exp(log_ceiling / growth) if log_ceiling < _FAR * growth else math.inf
    power = growth - 1
    if abs(power) < 1e-9:
        reach = math.log(top)
        grown = math.expm1(min(unit, reach))
    else:
        # `reach`: the `unit` at which the ceiling is met.
        reach = (1 - top**-power) / power if math.isfinite(top) else (math.inf if power < 0 else 1 / power)
        grown = math.exp(-math.log1p(-power * unit) / power) - 1 if unit < reach else top - 1
    beyond = ceiling * flux * (1 - reach / unit) if unit > reach else 0.0
    return current * grown + beyond
