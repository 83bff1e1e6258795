"""Isat by drawing: every trial has its own constants and its own noise, and is fitted anew (JCGM 101).

What is not drawn again is what the fit chose about smoothness: the deviation's size and length stay as the evidence
set them, and each trial starts from the fitted curve.
"""

from collections.abc import Sequence

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.calibration import Calibration
from runner.extraction.common_effects import SHUNT, UNKNOWN
from runner.extraction.curve import LegCurve
from runner.extraction.curve_data import CurveData
from runner.extraction.curve_fit import refit


def draw_knees(
    curve: LegCurve,
    calibration: Calibration,
    *,
    drops: Sequence[float],
    resistance_uncertainty: float,
    trials: int,
    generator: np.random.Generator,
) -> FloatArray:
    """Isat [trials, drops] A of a pulse leg, NaN where a trial does not reach the drop.

    The constants are drawn from normal distributions of their standard uncertainties, the rows' noise from its
    covariance. Temperature is not drawn: it belongs to the coordinate, not to the leg.
    """
    data = curve.fit.data
    assert isinstance(data, CurveData)
    noise = data.noise(curve.fit.inductance_at_rows)
    truth = data.with_rows(data.current - curve.fit.residuals, data.flux)
    relative = calibration.relative_current_uncertainty
    gain = calibration.voltage_gain.uncertainty / calibration.voltage_gain.value
    out = np.full((trials, len(drops)), np.nan)
    for trial in range(trials):
        scale = 1.0 + sum(u * generator.standard_normal() for u in relative.values())
        volts = 1.0 + gain * generator.standard_normal()
        ohms = resistance_uncertainty * generator.standard_normal()
        known = data.common.sigmas < UNKNOWN
        shared = data.common.sigmas * generator.standard_normal(len(known)) * known
        # What a bench with these errors would have read, evaluated with the constants as stated.
        drop = (data.volt_seconds / data.scales.flux - data.flux) * scale
        lead, missing = data.shunt.effect(curve.fit.inductance_at_rows)
        current = truth.current * scale - data.common.current @ shared + shared[SHUNT] * lead
        flux = data.volt_seconds / data.scales.flux * volts - drop
        flux = flux + ohms * data.charge / data.scales.flux - data.common.flux @ shared
        flux = flux - shared[SHUNT] * missing
        current = current + noise.color(generator.standard_normal(data.rows)) * curve.fit.inflation
        fit = refit(curve.fit, truth.with_rows(current, flux))
        knees = [curve.with_fit(fit).knee(drop_) for drop_ in drops]
        out[trial] = [np.nan if knee is None else knee.value for knee in knees]
    return out
