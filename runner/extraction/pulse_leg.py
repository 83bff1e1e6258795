"""One leg by the pulse method: ramps in, curve out, with what each constant of the bench does to it."""

from collections.abc import Sequence

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.calibration import Calibration
from runner.extraction.curve import LegCurve, Scale, leg_curve
from runner.extraction.curve_data import CurveData, lay_out
from runner.extraction.curve_fit import fit_again, fit_curve
from runner.extraction.fitted import Fit
from runner.extraction.ramp import Ramp


def pulse_leg(
    ramps: Sequence[Ramp],
    calibration: Calibration,
    *,
    temperature_degC: float,
    resistance: float,
    resistance_uncertainty: float,
    like: LegCurve | None = None,
) -> LegCurve:
    """Fit one leg.

    Args:
        ramps: all widths of one part at one temperature, at least one.
        calibration: of the bench.
        temperature_degC: of the part; the curve's coordinate.
        resistance, resistance_uncertainty: of the winding at that temperature [ohm].
        like: the same part at another temperature, to start from.
    """
    data = lay_out(
        ramps,
        resistance,
        skew=calibration.skew.uncertainty,
        shunt_time=calibration.shunt_inductance.uncertainty / calibration.shunt_now,
    )
    scale = Scale(data.scales.current, data.scales.flux)

    def curve(fit: Fit, rows: CurveData) -> LegCurve:
        shifts = constant_shifts(fit, rows, calibration, resistance_uncertainty)
        return leg_curve(fit, scale, temperature_degC=temperature_degC, shifts=shifts, again=again)

    def again(rows: CurveData, fit: Fit | None) -> LegCurve:
        return curve(fit_curve(rows) if fit is None else fit_again(rows, fit), rows)

    return curve(fit_curve(data, like=None if like is None else like.fit), data)


def constant_shifts(
    fit: Fit, data: CurveData, calibration: Calibration, resistance_uncertainty: float
) -> dict[str, FloatArray]:
    """Change of the fit's parameters for plus one standard uncertainty of each constant."""
    per_flux = 1.0 / (fit.inductance_at_rows * data.scales.flux)
    # A current scale that reads high by u: the true current and charge are smaller by u.
    drop = data.volt_seconds - data.flux * data.scales.flux
    scale = -data.current - per_flux * drop
    moves = {name: u * scale for name, u in calibration.relative_current_uncertainty.items()}
    gain = calibration.voltage_gain.uncertainty / calibration.voltage_gain.value
    moves["voltage gain"] = gain * per_flux * data.volt_seconds
    moves["winding resistance"] = resistance_uncertainty * per_flux * data.charge
    moves |= _rounding(data)
    return {name: (fit.gain @ move)[: fit.model.parameters] for name, move in moves.items() if np.any(move)}


def _rounding(data: CurveData) -> dict[str, FloatArray]:
    """What the digitizer's rounding does when the noise is too small to hide it: the first harmonic of the sawtooth
    at two phases a quarter apart, each with the weight of an unknown phase (see `ramp.undithered`)."""
    amplitude = np.zeros(data.rows)
    angle = np.zeros(data.rows)
    for ramp, rows in zip(data.ramps, data.members, strict=True):
        if ramp.quantum > 0 and np.isfinite(ramp.dither):
            quiet = float(np.exp(-2 * np.pi**2 * max(0.0, ramp.dither**2 - 1 / 12)))
            amplitude[rows] = ramp.quantum / np.pi * quiet / data.scales.current
            angle[rows] = 2 * np.pi * ramp.current / ramp.quantum
    half = amplitude / np.sqrt(2.0)
    return {"rounding (sine)": half * np.sin(angle), "rounding (cosine)": half * np.cos(angle)}
