"""How hot is the part while direct current flows? Its sensor sits on the body; the copper tells of itself.

Each bias reading brings the winding's resistance with it, from the source's own meters: current and voltage of the same
instant. By the copper law that is a thermometer inside the part. Winding and sensor differ by θ·I²R, with θ [K/W] found
from all readings of a leg at once, since the heat of one reading is small against the noise of its resistance. The
core, whose temperature the inductance belongs to, lies between the two: the middle is taken, and half of the difference
on either side as a rectangular uncertainty (GUM 4.3.7).
"""

from dataclasses import dataclass

import numpy as np

from runner.arrays import FloatArray
from runner.extraction.calibration import COPPER_ALPHA_20

FEWEST = 5  # readings that tell both a resistance and its rise
TELLS = 0.2  # of the rated current: below it the source's voltmeter says little about the winding
SURE = 3.0  # standard uncertainties by which θ must stand out of its noise to be believed


@dataclass(frozen=True, slots=True)
class Heat:
    """``kelvin_per_watt`` between winding and sensor with its standard ``uncertainty``, NaN where nothing told it; ``rise``
    [n] K of the part over its sensor at every reading, with its standard uncertainty ``rise_uncertainty`` [n].
    """

    kelvin_per_watt: float
    uncertainty: float
    rise: FloatArray
    rise_uncertainty: FloatArray


def follow_heat(
    current: FloatArray, resistance: FloatArray, sensor_degC: FloatArray, *, rated: float
) -> Heat:
    """What the readings of one leg tell about the part's temperature beyond what its sensor does.

    Args:
        current: through the winding [n] A.
        resistance: of the winding from the source's meters [n] ohm, NaN where nobody knows.
        sensor_degC: of the body [n].
        rated: current of the part [A]; smaller ones tell little about its resistance.

    With too few readings, or a θ that is lost in their noise, the sensor is believed and nothing is added.
    """
    copper = 1.0 + COPPER_ALPHA_20 * (sensor_degC - 20.0)
    told = np.isfinite(resistance) & (resistance > 0) & (current > TELLS * rated)
    nothing = np.zeros(len(current))
    if int(told.sum()) < FEWEST:
        return Heat(float("nan"), float("nan"), nothing, nothing)
    power = np.where(np.isfinite(resistance), current**2 * resistance, 0.0)
    # R/copper = R_20·(1 + α/copper·θ·P): a straight line in P. The voltmeter's noise makes a resistance the
    # less certain the smaller the current.
    slope = COPPER_ALPHA_20 / copper * power
    weight = current[told]
    basis = np.stack([np.ones(len(weight)), slope[told]], axis=1) * weight[:, None]
    value = (resistance / copper)[told] * weight
    found, *_ = np.linalg.lstsq(basis, value)
    rest = value - basis @ found
    scale = float(rest @ rest) / (len(weight) - 2)
    covariance = np.linalg.pinv(basis.T @ basis) * scale
    theta = float(found[1] / found[0])
    u = float(np.sqrt(covariance[1, 1])) / abs(float(found[0]))
    if not abs(theta) > SURE * u:
        return Heat(theta, u, nothing, nothing)
    rise = 0.5 * theta * power
    spread = np.hypot(2 * rise / np.sqrt(12.0), 0.5 * u * power)
    return Heat(theta, u, rise, spread)
