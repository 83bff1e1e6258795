"""From a mean waveform to the ramp: current against the integral of voltage, in bins, with their noise.

Order of the corrections: channel gains; shunt volts to amperes at the shunt's temperature; the shunt's series
inductance undone by the causal first-order inverse (no differentiation); voltage integrated on its own clock; the
channel skew taken out of the integral, which is smooth, and not out of the voltage, which jumps. A pulse's start
needs no detection better than a sample: the integral runs from before it, and what a jump between two samples leaves
uncertain is a constant in λ that the fit knows about (`common_effects.py`).
"""

from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from runner.arrays import FloatArray, IntArray
from runner.extraction.calibration import Calibration
from runner.extraction.mean_capture import FEWEST_PRETRIGGER, MeanCapture

BINS = 96
FEWEST_SAMPLES = 12
COARSE = (
    1.5  # growth of di/dt from one sample to the next beyond which the sampling does not show how it grew
)
CERTAIN = 6.0  # standard deviations of the noise by which it must have grown
JITTER = (
    0.1  # of the sampling interval, between captures; where the pulse begins on average is the fit's to find
)


@dataclass(frozen=True, slots=True)
class Ramp:
    """The rising part of one pulse in m bins (means over neighbouring samples).

    ``time`` s from the start of the pulse and ``edges`` [m + 1] of the bins; ``volt_seconds`` ∫v dt [V s]; ``charge``
    ∫i dt [A s]; ``current`` [A]; ``voltage`` [V]; ``spread``: variance of λ inside a bin [Wb²].

    Of its noise: ``noise_density`` of the current, white [A² s], smoothed over ``shunt_time`` [s] by the undoing of the
    shunt's inductance; ∫v dt walks at random by ``walk``·√t [V s/√s]; ``slope_uncertainty`` [V] of the voltage offset,
    ``level_uncertainty`` [A] of the current offset. Where the pulse begins jitters by ``jitter`` [s] between captures; a
    second there is worth ``start_voltage`` [V] of λ and, decaying with ``shunt_time``, ``start_rate`` [A/s] of current.
    ``interval`` [s] between samples. ``quantum``: step of the current's
    codes [A]; ``dither``: rms noise in steps.

    ``width`` [s] and ``peak`` [A] of the pulse; ``is_cut``: clipped samples ended it early; ``is_coarse``: so did a current
    that ran away between two samples.
    """

    point: int
    temperature_degC: float
    time: FloatArray
    volt_seconds: FloatArray
    charge: FloatArray
    current: FloatArray
    voltage: FloatArray
    spread: FloatArray
    edges: FloatArray
    noise_density: float
    shunt_time: float
    walk: float
    slope_uncertainty: float
    level_uncertainty: float
    start_voltage: float
    start_rate: float
    jitter: float
    interval: float
    quantum: float
    dither: float
    width: float
    peak: float
    is_cut: bool
    is_coarse: bool

    def flux(self, winding_resistance: float) -> FloatArray:
        """Flux linkage [Wb] at the bins: ∫(v − R i) dt."""
        return self.volt_seconds - winding_resistance * self.charge


def make_ramp(
    mean: MeanCapture, calibration: Calibration, *, point: int = -1, temperature_degC: float = 25.0
) -> Ramp | None:
    """The ramp of one mean waveform; None when there is no pulse in it or too few clean samples of one."""
    if not mean.has_pulse:
        return None
    step = mean.setting.interval
    to_ampere = calibration.nominal_shunt / (calibration.shunt_gain.value * calibration.shunt_now)
    reading = mean.current * to_ampere
    time_constant = calibration.shunt_time_constant
    current = undo_shunt_inductance(reading, step, time_constant)
    voltage = mean.voltage / calibration.voltage_gain.value
    start, stop = pulse_edges(voltage)
    late = calibration.skew.value if np.isfinite(calibration.skew.uncertainty) else 0.0
    volt_seconds = shift(integrate(voltage, step), voltage, step, late)
    charge = integrate(current, step)
    # The voltage channel's edges lie `late` after the current's; stay clear of both.
    settle = 3 + int(np.ceil(max(0.0, -late) / step))
    begin = start + settle
    end = stop - 2 - int(np.ceil(abs(late) / step))
    dirty = np.flatnonzero(~mean.clean[start:end])
    is_cut = dirty.size > 0
    if is_cut:
        end = min(end, start + int(dirty[0]) - 2)
    count = end - begin
    if count < FEWEST_SAMPLES:
        return None
    i_noise = mean.current_noise * to_ampere
    edges = begin + bin_edges(current[begin:end])
    resolved = resolved_bins(current, edges, i_noise / np.sqrt(mean.repeats))
    is_coarse = resolved < len(edges) - 1
    if is_coarse:
        edges = edges[: resolved + 1]
        end = int(edges[-1])
    sizes = np.diff(edges)

    def binned(values: FloatArray) -> FloatArray:
        return np.asarray(np.add.reduceat(values[: edges[-1]], edges[:-1]) / sizes)

    middle = np.repeat(binned(volt_seconds), sizes)
    spread = np.add.reduceat((volt_seconds[begin:end] - middle) ** 2, edges[:-1] - begin) / sizes
    repeats, before = mean.repeats, mean.pretrigger
    v_noise = mean.voltage_noise / calibration.voltage_gain.value
    v_step, i_step = _step(mean.setting.v_step), _step(mean.setting.i_step) * to_ampere
    behind_offset = max(before, 1) * repeats if before >= FEWEST_PRETRIGGER else 1
    slope_u = np.hypot(v_noise / np.sqrt(behind_offset), undithered(v_step, v_noise))
    level_u = np.hypot(i_noise / np.sqrt(behind_offset), undithered(i_step, i_noise))
    quarter = max(4, count // 4)
    first_rate = abs(float(np.polyfit(np.arange(quarter) * step, current[begin : begin + quarter], 1)[0]))
    time = np.asarray((np.arange(len(current)) - start + 0.5) * step, dtype=np.float64)
    return Ramp(
        point=point,
        temperature_degC=temperature_degC,
        time=binned(time),
        volt_seconds=binned(volt_seconds),
        charge=binned(charge),
        current=binned(current),
        voltage=binned(voltage),
        spread=np.asarray(spread),
        edges=np.asarray(time[edges - 1] + step / 2),
        noise_density=i_noise**2 * step / repeats,
        shunt_time=time_constant,
        walk=v_noise * np.sqrt(step / repeats),
        slope_uncertainty=float(slope_u),
        level_uncertainty=float(level_u),
        start_voltage=float(np.median(voltage[begin : begin + max(4, count // 8)])),
        start_rate=first_rate,
        jitter=JITTER * step / np.sqrt(repeats),
        interval=step,
        quantum=i_step,
        dither=i_noise / i_step if i_step > 0 else np.inf,
        width=(stop - start) * step,
        peak=float(current[begin:end].max()),
        is_cut=is_cut,
        is_coarse=is_coarse,
    )


def resolved_bins(current: FloatArray, edges: IntArray, noise: float) -> int:
    """How many of the bins come before the current runs away between two samples.

    At a knee sharper than the sampling the last few samples jump to any current, and what they say about the inductance
    there is what the sampling made of it. ``noise``: standard deviation of a sample of ``current`` [A].
    """
    sizes = np.diff(edges)
    level = np.add.reduceat(current[: edges[-1]], edges[:-1]) / sizes
    middle = 0.5 * (edges[1:] + edges[:-1])
    rate = np.diff(level) / np.diff(middle)
    sure = CERTAIN * noise * np.sqrt(6.0 / np.minimum(sizes[1:-1], sizes[2:])) / np.diff(middle)[1:]
    grown = rate[1:] > np.maximum(COARSE * rate[:-1], rate[:-1] + sure)
    ran = np.flatnonzero(grown & (sizes[2:] <= 2) & (sizes[1:-1] <= 2))
    return int(ran[0]) + 2 if ran.size else len(sizes)


def bin_edges(current: FloatArray) -> IntArray:
    """Edges of the bins over a ramp's samples [n]: even in time and in current together, so that the steep end of a
    saturated ramp gets bins of its own.

    Where the current stands is taken from a few coarse means: edges that followed the noise would select it.
    """
    count = len(current)
    blocks = min(24, count // 3)
    coarse = np.linspace(0, count, blocks + 1).astype(np.int64)
    level = np.maximum.accumulate(np.add.reduceat(current, coarse[:-1]) / np.diff(coarse))
    knots = np.concatenate([[0.0], 0.5 * (coarse[1:] + coarse[:-1]), [float(count)]])
    rise = np.concatenate([[2 * level[0] - level[1]], level, [2 * level[-1] - level[-2]]])
    way = 0.5 * (knots / count + (rise - rise[0]) / max(rise[-1] - rise[0], 1e-300))
    at = np.interp(np.linspace(0.0, 1.0, min(BINS, count // 2) + 1), way, knots)
    return np.unique(np.rint(at).astype(np.int64))


def integrate(values: FloatArray, step: float) -> FloatArray:
    """Running integral by the trapezoid rule, zero at the first sample; shape of ``values``.

    With white noise σ on n + 1 samples the end value has standard deviation step·σ·√(n − 1/2).
    """
    out = np.empty_like(values)
    out[0] = 0.0
    np.cumsum(0.5 * step * (values[1:] + values[:-1]), out=out[1:])
    return out


def shift(integral: FloatArray, slope: FloatArray, step: float, late: float) -> FloatArray:
    """``integral`` read ``late`` [s] after each sample, by the cubic through its values and slopes."""
    if late == 0.0:
        return integral
    whole = int(np.floor(late / step))
    f = late / step - whole
    cells = (1 + 2 * f) * (1 - f) ** 2 * integral[:-1] + f * f * (3 - 2 * f) * integral[1:]
    cells += step * f * (1 - f) ** 2 * slope[:-1] + step * f * f * (f - 1) * slope[1:]
    # What a delay reaches beyond either end is what stands there.
    before, behind = max(0, -whole), max(0, whole)
    return np.concatenate([np.full(before, cells[0]), cells[behind:], np.full(behind + 1, cells[-1])])[
        : len(integral)
    ]


def undo_shunt_inductance(reading: FloatArray, step: float, time_constant: float) -> FloatArray:
    """Current behind a shunt with series inductance: solves reading = i + τ di/dt, τ = L/R.

    Exact for a reading that is straight between its samples; a low-pass filter, so noise does not grow (its slow
    part, which the fit lives on, is left as it is).
    """
    if time_constant <= 0.0:
        return reading
    q = step / time_constant
    decay = np.exp(-q)
    # i' = decay·i + a·r[k+1] + b·r[k] for a linear reading between the samples.
    mean_weight = -np.expm1(-q) / q
    a, b = 1.0 - mean_weight, mean_weight - decay
    out, _ = lfilter([a, b], [1.0, -decay], reading, zi=np.array([b * reading[0] + decay * reading[0]]))
    return np.asarray(out)


def pulse_edges(voltage: FloatArray) -> tuple[int, int]:
    """First sample of the driven part and the first after it: where the voltage passes half of its plateau."""
    few = max(4, len(voltage) // 400)
    top = float(np.partition(voltage, -few)[-few])  # the highest but a few: a spike is no plateau
    above = voltage > 0.5 * top
    if not above.any():
        return 0, 0
    # The longest stretch above half, so that a spike before or a ring after does not count.
    jumps = np.flatnonzero(np.diff(np.concatenate(([False], above, [False])).astype(np.int8)))
    starts, stops = jumps[::2], jumps[1::2]
    longest = int(np.argmax(stops - starts))
    return int(starts[longest]), int(stops[longest])


def undithered(step: float, noise: float) -> float:
    """Standard uncertainty of a mean of rounded readings that averaging does not take away.

    Rounding a value with normal noise σ to steps q has a mean error (q/π)·exp(−2π²σ²/q²)·sin(2πx/q) (first harmonic;
    Widrow's quantisation theorem) and, without noise, q/√12 in all: what the first harmonic is short of that fades at
    least as fast as the second, exp(−8π²σ²/q²). ``noise`` includes what the rounding itself adds.
    """
    if step <= 0.0:
        return 0.0
    before_rounding = max(0.0, (noise / step) ** 2 - 1.0 / 12.0)
    first = np.exp(-4 * np.pi**2 * before_rounding) / (2 * np.pi**2)
    rest = np.exp(-16 * np.pi**2 * before_rounding) * (1 / 12 - 1 / (2 * np.pi**2))
    return float(step * np.sqrt(first + rest))


def _step(step: float) -> float:
    return step if np.isfinite(step) else 0.0
