"""May the next pulse be fired? Worst current and energy of a wider pulse, from the last one's capture.

A wider pulse adds flux linkage dλ = v dt, at most the voltage at the start of the last pulse times the added time, and
current by the slope di/dλ = 1/L_d. At the end of the last capture that slope is known; beyond it the inductance may
fall. The steepest knees of the trade (ungapped or sharply gapped ferrite) lose nine tenths of L_d within a fifth more
flux linkage: slope ~ λ**13. So the worst case lets the slope grow as λ**STEEPEST from its measured value (or one and a
half times as steep as the capture itself bends, if that is more), up to that of a part with hardly any core left.

A law that saturates outright bends faster than any power in the end, so no step may use more than HEADROOM of what is
left to the limit: the bound may be wrong by its own size and the limit still holds.

Where a step asked for is not safe by that bound, a shorter one may be: the climb then fires scouting pulses in between,
each of which tells more. A plan with few widths is thus climbed as carefully as one with many.
"""

import math
from dataclasses import dataclass

from runner.sweep.look import Look

STEEPEST = 15.0
_BEND_FACTOR = 1.5  # on the exponent seen, for noise and for knees that are still turning
_LEFT = 0.01  # of the initial inductance, left when the core is saturated (air-core value of a wound core is 1 to 5 %)
_SLOPE_FACTOR = 1.05  # on the measured slope, for noise and calibration
HEADROOM = 0.5
_MARGIN = 0.97  # of a limit may be predicted; the rest is for the current's own calibration
_FIRST_LEFT = 0.02  # of the nominal inductance, assumed for a part nobody has pulsed yet
_SMALLEST_GAIN = 1.01  # a scouting pulse must be at least this much wider than the last, or the climb ends
_BISECTIONS = 40


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
    flux = last.flux_linkage + last.drive * added
    likely = last.peak + _rise(last, flux, min(last.growth, STEEPEST), last.end_slope)
    steepest = max(STEEPEST, _BEND_FACTOR * last.growth)
    worst = last.peak + _rise(last, flux, steepest, _SLOPE_FACTOR * last.end_slope)
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


def _rise(last: Look, flux: float, growth: float, slope: float) -> float:
    """Integral of slope * (λ/λ_end)**growth from the last flux linkage to `flux`, the slope held at its ceiling [A]."""
    end = last.flux_linkage
    if flux <= end or slope <= 0:
        return 0.0
    ceiling = max(last.start_slope / _LEFT, slope)
    # Flux linkage, relative to the last, at which the slope is at its ceiling; compared by logarithms, as a growth near
    # zero puts it beyond any number.
    if growth * math.log(flux / end) <= math.log(ceiling / slope):
        bend: float = flux / end
    else:
        bend = math.exp(math.log(ceiling / slope) / growth)
    rise = slope * end / (growth + 1) * float(bend ** (growth + 1) - 1)
    return float(rise + ceiling * max(flux - bend * end, 0.0))
