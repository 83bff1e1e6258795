"""The winding's resistance at one leg, from the ohmmeter or, failing that, from the plan and the copper law."""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.calibration import Calibration, copper_ratio

# A data sheet's typical resistance is good to about this much (relative, taken as one standard uncertainty).
NOMINAL_TOLERANCE = 0.05


@dataclass(frozen=True, slots=True)
class Resistance:
    """Winding resistance [ohm] at ``temperature_degC``; ``is_measured`` False when it is the plan's figure."""

    ohm: float
    uncertainty: float
    temperature_degC: float
    is_measured: bool


def winding_resistance(
    readings: FloatArray,
    temperatures_degC: FloatArray,
    calibration: Calibration,
    *,
    at_degC: float,
    nominal_20: float,
) -> Resistance:
    """Resistance at ``at_degC`` from readings [n] taken at nearby temperatures [n], NaN ignored.

    Each reading is corrected for gain and leads and brought to ``at_degC`` by the copper law.
    """
    good = np.isfinite(readings) & np.isfinite(temperatures_degC) & (readings > 0)
    if not good.any():
        ohm = nominal_20 * copper_ratio(at_degC)
        return Resistance(ohm, NOMINAL_TOLERANCE * ohm, at_degC, False)
    gain, lead = calibration.ohmmeter_gain, calibration.lead_resistance
    # Points share readings: the ohmmeter is asked less often than pulses are fired.
    pairs = np.unique(np.column_stack([readings[good], temperatures_degC[good]]), axis=0)
    ratio = np.array([copper_ratio(at_degC, float(t)) for t in pairs[:, 1]])
    values = (pairs[:, 0] / gain.value - lead.value) * ratio
    ohm = float(np.mean(values))
    scatter = float(np.std(values, ddof=1) / np.sqrt(len(values))) if len(values) > 1 else 0.0
    u = np.sqrt(scatter**2 + (gain.uncertainty / gain.value * ohm) ** 2 + lead.uncertainty**2)
    return Resistance(ohm, float(u), at_degC, True)
